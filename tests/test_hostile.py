"""Files from strangers: each is refused or read in bounded time and memory, and nothing beside it is touched.

Every case is one command in a process of its own, which reports its processor time and its peak of resident memory:
at most 2 s above those of the same command with a good file, and 500 MB. Bounds of procgen's own, common practice.
The study tests/studies/hostile.py draws thousands of such files; here is its quick mode.
"""

import gzip
import json
import os
import re
import shutil
import subprocess
import sys
import tempfile
import time
from functools import cache
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from typer.testing import CliRunner

import procgen as pg
from procgen.chance.laws import LAWS
from procgen.cli import app
from procgen.ensemble.seal import SEAL, seal
from procgen.report.letters import tame
from procgen.spec import pages
from procgen.spec.pages import Bomb, read_within, refuse_bombs
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from tests.studies import hostile
from tests.studies.hostile import MEGABYTES, OBEYED, SECONDS, SPEC

HEAD = "seed: 1\npaths: 10\ntime: {steps: 20}\n"
HEAD_RAW = {"seed": 1, "paths": 10, "time": {"steps": 20}, "series": {"x": [{"white_noise": {"sd": 1}}]}}
CHILD = """
import atexit, pathlib, resource, sys
peak = pathlib.Path(sys.argv.pop(1))  # of this program: what getrusage tells counts the one that started it, too
atexit.register(lambda: peak.write_bytes(pathlib.Path("/proc/self/status").read_bytes()))
resource.setrlimit(resource.RLIMIT_AS, (6 << 30, 6 << 30))
from procgen.cli import main
main()
"""


def command(*arguments, cwd=None):
    """Exit code, what was printed, processor seconds and peak MB of a command in a process of its own."""
    with tempfile.TemporaryDirectory() as folder:
        peak = Path(folder) / "peak"
        words = [sys.executable, "-c", CHILD, str(peak), *map(str, arguments)]
        with subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, cwd=cwd) as process:
            said = process.stdout.read().decode("utf-8", "replace")
            _, status, used = os.wait4(process.pid, 0)
            process.returncode = os.waitstatus_to_exitcode(status)
        most = re.search(r"VmHWM:\s*(\d+) kB", peak.read_text(encoding="ascii"))
        return process.returncode, said, used.ru_utime + used.ru_stime, int(most[1]) / 1024


@cache
def usual(name, folder):
    """Processor seconds of a command with good files."""
    good = {"validate": [folder / "data.csv", "--spec", folder / "spec.yaml"], "digest": [folder / "out"]}
    return command(name, *good[name])[2]


@pytest.fixture(scope="module")
def good(tmp_path_factory):
    folder = tmp_path_factory.mktemp("good")
    (folder / "spec.yaml").write_text(SPEC, encoding="utf-8")
    pg.render(folder / "spec.yaml", folder / "out").export(folder / "data.csv")
    return folder


def refused(good, name, *arguments, says, code=2):
    """A command that ends in time, small, with that code, and says that; its text."""
    found, said, seconds, megabytes = command(name, *arguments)
    assert found == code, said[-500:]
    assert says in said and "Traceback" not in said and "in procgen itself" not in said
    assert not OBEYED.search(said)
    assert seconds < usual(name, good) + SECONDS, f"{seconds:.1f} s"
    assert megabytes < MEGABYTES, f"{megabytes:.0f} MB"
    return said


# specs


def series(count):
    return HEAD + "series:\n" + "".join(f"  s{k}: {{white_noise: {{sd: 1}}}}\n" for k in range(count))


NAME = "expected a name of at most 100 letters a–z, digits and _"
SPECS = {
    "1e6 lines": ("x: 1\n" * 1_000_000, "expected a spec of at most 300,000 bytes, got a larger file"),
    "1e6 empty lines": ("\n" * 1_000_000, "expected a spec of at most 300,000 bytes"),
    "10,000 series": (series(10_000), "expected a spec of at most 300,000 bytes"),
    "flow": (HEAD + "series: " + "[" * 100_000, "expected at most 60 levels of nesting"),
    "block": (HEAD + "series:\n" + "".join(" " * k + "- \n" for k in range(1, 700)), "expected at most 60 levels"),
    "aliases": (
        "a0: &a0 [x, x]\n" + "\n".join(f"a{k}: &a{k} [{', '.join([f'*a{k - 1}'] * 9)}]" for k in range(1, 40)),
        "expected at most 100,000 values, with aliases expanded",
    ),
    "brackets": (HEAD + "x: a" + "[b]" * 60_000 + ": }\n", "this is not valid YAML"),
    "words": (HEAD + "x: ]" + "w" * 150_000 + "}\n", "this is not valid YAML"),
    "digits": (HEAD.replace("1\n", "9" * 200_000 + "\n") + "series: {x: {constant: 1}}\n", "expected"),
    "paths 1e18": (HEAD.replace("10", str(10**18)) + "series: {x: {constant: 1}}\n", "expected a whole number"),
    "steps 1e18": (HEAD.replace("20", str(10**18)) + "series: {x: {constant: 1}}\n", "expected a whole number"),
    "name": (HEAD + "series: {../../etc/x: {constant: 1}}\n", NAME),
    "absolute": (HEAD + "series: {/etc/x: {constant: 1}}\n", NAME),
    "drive": (HEAD + 'series: {"C:\\\\x": {constant: 1}}\n', NAME),
    "NUL": (HEAD + 'series: {"a\\0b": {constant: 1}}\n', "the invisible character U+0000 is not allowed"),
    "escape": (HEAD + 'series: {"\\e[2J": {constant: 1}}\n', "the invisible character U+001B is not allowed"),
    "bidi": (HEAD + "series: {a\u202eb: {constant: 1}}\n", NAME),
    "markup": (HEAD + "series: {<script>: {constant: 1}}\n", NAME),
    "label": (HEAD + "series: {x: [{constant: 1, as: ../y}]}\n", NAME),
    "variant": (HEAD + "series: {x: {constant: 1}}\nvariants: {../y: {seed: 2}}\n", NAME),
    "device": (HEAD + "series: {x: {given: {file: /dev/zero, column: x, step: step}}}\n", "got a folder or a device"),
    "outputs": (
        HEAD + "shared: {m: [{vector_arma: {names: [low, mid,$high], phi: [[[0.5]]], sd: [1]}}]}\n"
        "series: {x: [{use: m.vector_arma.low}]}\n",
        "expected",
    ),
    "no value": (
        HEAD + "shared: {m: {chain: {states: [a, b], durations: {a: 5, b: 3}}}}\n"
        "series: {x: [{ar: {phi: 0.5, sd: 1}}], y: [{ar: {phi: 0.5, sd: 1}}]}\n"
        "correlation: [{between: [x.ar, y.ar], by: m, valu: {a: 0.1, b: 0.2}}]\n",
        "expected a value for each state of m",
    ),
    "kind": (HEAD + 'series: {x: {"\\u202e[red]": 1}}\n', "unknown term ‹U+202E›[red]"),
}  # fmt: skip


@pytest.mark.parametrize("name", SPECS)
def test_specs(tmp_path, name):
    text, says = SPECS[name]
    (tmp_path / "a.yaml").write_text(text, encoding="utf-8")
    begin = time.process_time()
    result = CliRunner().invoke(app, ["theory", str(tmp_path / "a.yaml")])
    assert time.process_time() - begin < SECONDS
    assert result.exit_code == 2 and says in result.output and not OBEYED.search(result.output)
    assert os.listdir(tmp_path) == ["a.yaml"]


def test_many_harmonics_are_read_in_time():
    text = ", ".join(["{amplitude: 1, peak: 3}"] * 11_000)
    begin = time.process_time()
    spec = read_text(f"{HEAD}series:\n  x: {{seasonal: {{period: 12, harmonics: [{text}]}}}}\n", catalogue(), LAWS)
    assert len(spec.raw["series"]["x"]["seasonal"]["harmonics"]) == 11_000
    assert time.process_time() - begin < 3 * SECONDS


def test_a_pipe_is_no_table(good, tmp_path):
    os.mkfifo(tmp_path / "x.csv")
    spec = HEAD + "series: {x: {given: {file: x.csv, column: x, step: step}}}\n"
    (tmp_path / "a.yaml").write_text(spec, encoding="utf-8")
    for words in (["theory", tmp_path / "a.yaml"], ["validate", tmp_path / "x.csv", "--spec", good / "spec.yaml"]):
        result = CliRunner().invoke(app, [*map(str, words)])
        assert result.exit_code == 2 and "a device at" in result.output


def test_markup_and_marks_of_direction_reach_no_terminal(tmp_path):
    title = "\u202e<b>x</b> \u2066{task} %s [red]"
    body = [{"white_noise": {"sd": 1}}]
    raw = {"seed": 1, "paths": 5, "time": {"steps": 9}, "title": title, "series": {"x": {"unit": title, "of": body}}}
    (tmp_path / "a.yaml").write_text(json.dumps(raw), encoding="utf-8")
    (tmp_path / "b.yaml").write_text(json.dumps({**raw, "series": {"x": body}, "title": "b"}), encoding="utf-8")
    one, two = str(tmp_path / "a.yaml"), str(tmp_path / "b.yaml")
    for words in (["theory", one], ["theory", one, "--json"], ["render", one, "-o", str(tmp_path / "out")]):
        result = CliRunner().invoke(app, words)
        assert result.exit_code == 0 and not OBEYED.search(result.output)
    result = CliRunner().invoke(app, ["difference", one, two, "--json"])
    assert not OBEYED.search(result.output)
    assert title in [change["old"] for change in json.loads(result.output)["meaning"]]


def test_tame_leaves_everything_else():
    assert tame("a\tb\nü−✓ \x1b[2J\r\x9b\u2028") == "a\tb\nü−✓ ‹U+001B›[2J‹U+000D›‹U+009B›‹U+2028›"
    assert json.loads(tame(json.dumps("\x9b\u202e", ensure_ascii=False), json=True)) == "\x9b\u202e"


# manifests and what is beside them


def changed(good, folder, change):
    """A copy of a good ensemble whose manifest was changed and sealed again."""
    shutil.copytree(good / "out", folder)
    data = json.loads((folder / "manifest.json").read_text(encoding="utf-8"))
    change(data)
    text = json.dumps({**data, SEAL: seal(data)}, ensure_ascii=False)
    (folder / "manifest.json").write_text(text, encoding="utf-8")
    return folder


def huge(data):
    data.update(paths=2**61, steps=2**61)
    data["identity"] |= {"paths": 2**61, "steps": 2**61}
    data["parts"][0] |= {"paths": 2**61, "steps": 2**61}


def long(data):
    data["identity"]["paths"] = data["paths"] = data["parts"][0]["paths"] = 2**40
    data["parts"][0]["file"] = f"paths-000000000-{2**40 - 1}.parquet"


def outside(data):
    data["parts"][0]["file"] = "../../secret.parquet"


def absolute(data):
    data["parts"][0]["file"] = "/etc/passwd"


def column(data):
    data["identity"]["partition"] = "series"
    data["columns"][0]["name"] = "../../flow"


def unit(data):
    data["columns"][0]["unit"] = {"a": 1}


def escape(data):
    data["identity"]["\x1b[2J\u202e"] = data["identity"]["layout"] = "\x1b]0;x\x07"


def reveals(data):
    data["identity"]["reveal"] = [1.5]


def opens(data):
    body = [{"given": {"file": "/etc/passwd", "column": "x", "step": "step"}}]
    data["spec"]["raw"]["series"]["flow"] = body


MANIFESTS = {
    huge: "is not a manifest of procgen, or is damaged: a part is named",
    long: "expected 32985348833280 rows",
    outside: "a part is named '../../secret.parquet', expected",
    absolute: "a part is named '/etc/passwd', expected",
    column: "a column is",
    unit: "a column is",
    escape: "expected layout",
    reveals: "what it reveals is not a list of names",
    opens: "expected the numbers themselves, as render keeps them, got the name of a file",
}


@pytest.mark.parametrize("change", MANIFESTS, ids=lambda change: change.__name__)
def test_manifests(good, tmp_path, change):
    out = changed(good, tmp_path / "out", change)
    if change is long:
        next(out.glob("*.parquet")).rename(out / f"paths-000000000-{2**40 - 1}.parquet")
    code = 1 if change in (long, opens) else 2
    refused(good, "digest", out, says=MANIFESTS[change], code=code)


@pytest.mark.parametrize(
    "text", ["[" * 100_000, '{"procgen": ' + "9" * 5000 + "}", '{"a": [' + "[]," * 1_100_000 + "1]}"]
)
def test_manifests_that_are_no_manifest(good, tmp_path, text):
    shutil.copytree(good / "out", tmp_path / "out")
    (tmp_path / "out" / "manifest.json").write_text(text)
    refused(good, "digest", tmp_path / "out", says="it is damaged, or not ours")


def test_a_manifest_that_never_ends(good, tmp_path):
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "manifest.json").symlink_to("/dev/zero")
    refused(good, "digest", tmp_path / "out", says="is a folder or a device")
    (tmp_path / "out" / "manifest.json").unlink()
    with open(tmp_path / "out" / "manifest.json", "wb") as file:
        file.truncate(10 << 30)
    refused(good, "digest", tmp_path / "out", says="at most 33,554,432 are read")


# links in OUT


def test_links_in_out_are_not_followed_when_writing(good, tmp_path):
    victim = tmp_path / "victim"
    victim.mkdir()
    (victim / "lock").write_text("mine")
    for name in (".state", "tables"):
        shutil.copytree(good / "out", tmp_path / name)
        (tmp_path / name / name).symlink_to(victim)
        draw = "series: {flow: {white_noise: {sd: {draw: {uniform: [1, 2]}, over: path}}}}\n"
        (tmp_path / "b.yaml").write_text(HEAD + draw, encoding="utf-8")
        result = CliRunner().invoke(
            app, ["render", str(tmp_path / "b.yaml"), "-o", str(tmp_path / name), "--overwrite"]
        )
        assert result.exit_code == 2 and "is a link to another place" in result.output
    lock = tmp_path / "lock"
    (lock / ".state").mkdir(parents=True)
    (lock / ".state" / "lock").symlink_to(victim / "lock")
    result = CliRunner().invoke(app, ["render", str(good / "spec.yaml"), "-o", str(lock)])
    assert result.exit_code == 2 and "the system refused making" in result.output
    part = next((good / "out").glob("*.parquet")).name
    (lock / ".state" / "lock").unlink()
    shutil.copy(good / "out" / "manifest.json", victim)
    kept = {path.name: path.read_text() for path in victim.iterdir()}
    for name, of in ((part, "lock"), ("manifest.json", "manifest.json")):
        (lock / name).symlink_to(victim / of)
    result = CliRunner().invoke(app, ["render", str(good / "spec.yaml"), "-o", str(lock), "--overwrite"])
    assert result.exit_code == 0, result.output
    assert pg.check_digest(lock).ok and not (lock / part).is_symlink()
    assert {path.name: path.read_text() for path in victim.iterdir()} == kept and kept["lock"] == "mine"


def test_what_a_render_left_is_not_unpacked(tmp_path):
    from procgen.ensemble.store import Folder

    (tmp_path / ".state").mkdir()
    np.savez_compressed(tmp_path / ".state" / "a.npz", x=np.zeros(1000))
    np.savez(tmp_path / ".state" / "b.npz", x=np.zeros(1000))
    np.savez(tmp_path / ".state" / "c.npz", x=np.array([{}], dtype=object))
    assert [Folder(tmp_path).load_state(name) is None for name in "abc"] == [True, False, True]


# tables and parts


def test_text_that_unpacks_to_gigabytes(good, tmp_path):
    with gzip.open(tmp_path / "a.csv.gz", "wb", 9) as file:
        file.write(b"path,step,flow,level\n")
        for _ in range(6):
            file.write(b"0,0,0,0\n" * 2_000_000)
    assert (tmp_path / "a.csv.gz").stat().st_size < 1_000_000
    refused(good, "validate", tmp_path / "a.csv.gz", "--spec", good / "spec.yaml", says="unpack to more than")


@pytest.mark.parametrize(("name", "head"), [("a.csv", b"path,step,flow,level\n0,0,1,1\n"), ("a.csv.gz", b"")])
def test_a_line_without_end(good, tmp_path, name, head):
    with (gzip.open if name.endswith("gz") else open)(tmp_path / name, "wb") as file:
        file.write(head)
        for _ in range(40):
            file.write(b"1" * 1_000_000)
    refused(good, "validate", tmp_path / name, "--spec", good / "spec.yaml", says="a line of more than")


def test_a_header_of_a_million_columns(good, tmp_path):
    (tmp_path / "a.csv").write_bytes(b"a," * 1_000_000 + b"b\n0\n")
    refused(good, "validate", tmp_path / "a.csv", "--spec", good / "spec.yaml", says="1,000,001 columns")


def zeros(path, rows, groups=1, **options):
    """A small file of many rows: path, step, flow and level are all zero."""
    kinds = {"path": pa.int64(), "step": pa.int64(), "flow": pa.float64(), "level": pa.float64()}
    table = pa.table({name: pa.array(np.zeros(rows), kind) for name, kind in kinds.items()})
    with pq.ParquetWriter(path, table.schema, compression="zstd", **options) as file:
        for _ in range(groups):
            file.write_table(table, row_group_size=rows)


def test_rows_that_a_small_file_repeats(good, tmp_path):
    zeros(tmp_path / "a.parquet", 1_000_000, 4)
    assert (tmp_path / "a.parquet").stat().st_size < 1_000_000
    refused(good, "validate", tmp_path / "a.parquet", "--spec", good / "spec.yaml", says="would become 128,000,000")


def test_a_text_that_a_small_file_repeats(good, tmp_path):
    names = pa.DictionaryArray.from_arrays(pa.array(np.zeros(50_000, np.int32)), ["x" * 1_000_000])
    columns = {"path": names.cast(pa.dictionary(pa.int32(), pa.string())), "step": np.arange(50_000)}
    columns |= {name: np.zeros(50_000) for name in ("flow", "level")}
    table = pa.table(columns)
    pq.write_table(table, tmp_path / "a.parquet", compression="zstd", store_schema=False)
    refused(good, "validate", tmp_path / "a.parquet", "--spec", good / "spec.yaml", says="would become 50,000,000,000")


def test_a_page_that_grows_to_gigabytes(tmp_path, monkeypatch):
    # written with one page of 16 MB for each column, and read with a bound below that: the size is the header's
    options = {"data_page_size": 1 << 30, "use_dictionary": False}
    pq.write_table(pa.table({"x": ["y" * (16 << 20)]}), tmp_path / "a.parquet", compression="zstd", **options)
    found = pq.read_metadata(tmp_path / "a.parquet")
    assert refuse_bombs(tmp_path / "a.parquet", found, ["x"]) == 1
    monkeypatch.setattr(pages, "MOST_BYTES", 1 << 20)
    with pytest.raises(Bomb, match=r"a page of column x would become 16,777,\d\d\d bytes, more than 1,048,576"):
        refuse_bombs(tmp_path / "a.parquet", found, ["x"])
    assert refuse_bombs(tmp_path / "a.parquet", found, []) == 0


@pytest.mark.parametrize("version", ["1.0", "2.0"])
@pytest.mark.parametrize("compression", ["none", "snappy", "gzip", "zstd", "brotli"])
@pytest.mark.parametrize("dictionary", [True, False])
def test_values_of_pages_are_those_of_the_file(tmp_path, version, compression, dictionary):
    data = {
        "x": pa.array(np.arange(5000.0), mask=np.arange(5000) % 7 == 0),
        "y": pa.array([f"a{k % 9}" for k in range(5000)]),
        "z": pa.array([[k] * 3 for k in range(5000)]),
        "w": pa.array([{"a": k, "b": "c"} for k in range(5000)]),
    }
    path = tmp_path / "a.parquet"
    options = {"data_page_version": version, "compression": compression, "use_dictionary": dictionary}
    pq.write_table(pa.table(data), path, data_page_size=1000, row_group_size=2000, write_statistics=True, **options)
    found = pq.read_metadata(path)
    assert [refuse_bombs(path, found, [name]) for name in "xyzw"] == [5000, 5000, 15_000, 10_000]
    assert read_within(path, None, 1 << 20).to_pylist() == pa.table(data).to_pylist()
    with pytest.raises(Bomb, match="would become"):
        read_within(path, ["x"], 10_000)


@pytest.mark.parametrize(
    "kind", [pa.list_(pa.float64()), pa.struct([("a", pa.string())]), pa.binary(200), pa.decimal256(70)]
)
def test_columns_of_other_types(good, tmp_path, kind):
    table = pq.read_table(next((good / "out").glob("*.parquet")))
    for name in ("step", "flow"):
        other = table.set_column(table.column_names.index(name), name, pa.nulls(table.num_rows, kind))
        pq.write_table(other, tmp_path / "a.parquet")
        result = CliRunner().invoke(app, ["validate", str(tmp_path / "a.parquet"), "--spec", str(good / "spec.yaml")])
        assert result.exit_code in (1, 2) and "in procgen itself" not in result.output
        out = tmp_path / name
        shutil.copytree(good / "out", out)
        shutil.copy(tmp_path / "a.parquet", next(out.glob("*.parquet")))
        result = CliRunner().invoke(app, ["digest", str(out)])
        assert result.exit_code == 1 and f"expected one column {name} of type" in result.output


def test_a_panel_without_its_ids(tmp_path):
    made = pg.render(HEAD_RAW, tmp_path / "out", layout="panel")
    part = next((tmp_path / "out").glob("*.parquet"))
    table = pq.read_table(part)
    pq.write_table(table.set_column(0, "id", pa.array(["x"] * 199 + ["y"])), part)
    assert "column id has y" in pg.check_digest(tmp_path / "out").text()
    pq.write_table(table.set_column(0, "id", pa.array(["x"] * 200).dictionary_encode()), part)
    assert pg.check_digest(tmp_path / "out").digest == made.digest
    pq.write_table(table.drop_columns(["id"]), part)
    assert "is damaged: it has no column id" in pg.check_digest(tmp_path / "out").text()


def test_row_groups_of_any_size_are_read_in_runs(tmp_path, monkeypatch):
    from procgen.ensemble import parquet

    made = pg.render(HEAD_RAW, tmp_path / "out")
    part = next((tmp_path / "out").glob("*.parquet"))
    pq.write_table(pq.read_table(part), part, row_group_size=150)
    monkeypatch.setattr(parquet, "LARGEST", 100)
    monkeypatch.setattr(parquet, "GROUP_ROWS", 70)
    assert pg.check_digest(tmp_path / "out").digest == made.digest
    assert np.array_equal(pg.open_ensemble(tmp_path / "out")["x"], pg.render(HEAD_RAW)["x"])


# the study


def test_the_study_in_its_quick_mode():
    told = []
    found = hostile.study(lambda inputs: inputs >= 16, 7, 16, told.append)
    assert told == [] and found["inputs"] >= 16


def test_the_study_sees_what_it_looks_for(tmp_path):
    bench = hostile.Bench(tmp_path)
    assert [*bench.run(["terms", "garch"])] == []
    script = (
        "import os, sys\nfrom pathlib import Path\nfrom tests.studies import hostile\n"
        "work = Path(sys.argv[1])\nhostile.watch(work)\n"
        "open(work / 'in', 'w').close(); open(work.parent / 'out', 'w').close(); os.remove(work.parent / 'out')\n"
        "os.mkdir(work / 'a'); os.system('true')\nprint(*hostile.EVENTS, sep='\\n')"
    )
    (tmp_path / "work").mkdir()
    words = [sys.executable, "-c", script, str(tmp_path / "work")]
    said = subprocess.run(words, cwd=hostile.ROOT, capture_output=True, text=True, check=True).stdout
    assert [re.split(r"[ /]", line)[0] for line in said.splitlines()] == ["opens", "os.remove", "os.system"]
