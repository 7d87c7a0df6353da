"""Ensembles in a store behind a URL: a real S3 server on loopback (moto), and stores that only fsspec knows."""

import json
import os
import re
import subprocess
import sys
import urllib.error
import urllib.request

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import procgen as pg
from procgen.ensemble import EnsembleError, places, plan
from procgen.ensemble.places import Remote, place_of
from procgen.ensemble.watched import Watched
from procgen.spec import pages
from tests.ensemble.fakes import ROOT, fake_check, fake_render, fake_spec, start
from tests.waiting import wait_for

pytest.importorskip("moto.server")
SPEC = {"seed": 3, "paths": 640, "steps": 40, "columns": {"x": {}, "y": {"decimals": 1}}}
PART = 1 << 16


@pytest.fixture(scope="module")
def server(tmp_path_factory):
    """The address of an S3 server, with the credentials that it does not look at."""
    log = tmp_path_factory.mktemp("s3") / "log"
    with open(log, "wb") as out:
        process = subprocess.Popen([sys.executable, "-m", "moto.server", "-p", "0"], stdout=out, stderr=out)
    try:
        running = re.compile(rb"Running on http://(\S+)\s")
        address = wait_for("the S3 server", lambda: running.search(log.read_bytes()))[1].decode()
        yield address
    finally:
        process.kill()
        process.wait()


@pytest.fixture
def bucket(server, monkeypatch, request):
    """A URL in a bucket of its own."""
    for name, value in (("ACCESS_KEY_ID", "k"), ("SECRET_ACCESS_KEY", "s"), ("REGION", "us-east-1")):
        monkeypatch.setenv(f"AWS_{name}", value)
    name = f"store-{abs(hash(request.node.name)) % 10**9}"
    urllib.request.urlopen(urllib.request.Request(f"http://{server}/{name}", method="PUT"))
    options = f"endpoint_override={server.replace(':', '%3A')}&scheme=http"
    return lambda key: f"s3://{name}/{key}?{options}"


def keys(url):
    place = place_of(url)
    return sorted(entry.name for entry in place.iterdir())


@pytest.mark.parametrize("workers", [1, 2])
def test_a_store_holds_the_digest_of_a_folder(bucket, tmp_path, monkeypatch, workers):
    monkeypatch.setattr(plan, "PART_BYTES", PART)
    url = bucket("runs/one")
    made = fake_render(fake_spec(**SPEC), url, workers=workers)
    here = fake_render(fake_spec(**SPEC), tmp_path / "here", workers=1)
    assert made.digest == here.digest
    assert len(made.manifest.parts) > 1
    assert keys(url) == sorted(path.name for path in (tmp_path / "here").iterdir())
    assert fake_check(url).ok
    assert fake_check(url, redraw=True).ok
    assert fake_render(fake_spec(**SPEC), url).digest == here.digest


def test_killed_in_the_middle_of_uploads_it_goes_on_to_the_same_digest(bucket):
    url = bucket("runs/killed")
    for kept, halt in ((1, 256), (3, 512)):  # parts that are there when it is killed, and from which path on it halts
        process = start({**SPEC, "_halt_from": halt}, url, part_bytes=PART, workers=1, resume=True)
        process.stdout.readline()
        wait_for(f"{kept} parts", lambda kept=kept: sum(name.startswith("paths-") for name in keys(url)) >= kept)
        process.kill()
        process.communicate()
        assert "manifest.json" not in keys(url)
    made = fake_render(fake_spec(**SPEC), url, workers=1, resume=True)
    assert made.digest == fake_render(fake_spec(**SPEC)).digest
    assert ".state" not in keys(url)


def test_an_upload_that_fails_half_way_shows_nothing(bucket, monkeypatch):
    url, put, count = bucket("runs/failed"), Remote.put, []

    def half(self, local, temporary):
        count.append(self.name)
        if len([name for name in count if name.startswith("paths-")]) < 3 or not self.name.startswith("paths-"):
            return put(self, local, temporary)
        with open(local, "rb") as file, self.store.open_output_stream(temporary.key) as out:
            out.write(file.read(1000))
        raise OSError("the connection was reset")

    monkeypatch.setattr(plan, "PART_BYTES", PART)
    monkeypatch.setattr(Remote, "put", half)
    with pytest.raises(EnsembleError, match=r"^the system refused writing s3://.*paths-.*: the connection was reset$"):
        fake_render(fake_spec(**SPEC), url, workers=1)
    there = keys(url)
    assert "manifest.json" not in there
    assert sum(name.startswith("paths-") for name in there) == 2
    monkeypatch.setattr(Remote, "put", put)
    assert fake_render(fake_spec(**SPEC), url, workers=1, resume=True).digest == fake_render(fake_spec(**SPEC)).digest


def test_the_commands_take_urls(bucket, tmp_path):
    url = bucket("runs/pump")
    env = {**os.environ, "PYTHONPATH": str(ROOT)}

    def ran(*words):
        command = [sys.executable, "-m", "procgen", *words]
        return subprocess.run(command, cwd=ROOT, env=env, capture_output=True, text=True)

    made = ran("render", "specs/pump-flow.yaml", "-o", url, "--paths", "120", "--steps", "60")
    assert made.returncode == 0, made.stderr
    digest = pg.render(str(ROOT / "specs" / "pump-flow.yaml"), paths=120, steps=60).digest
    assert digest in made.stdout
    verdict = json.loads(ran("validate", url, "--json").stdout)
    assert verdict["verdict"] == "agrees"
    assert ran("digest", url, "--expect", digest).returncode == 0
    assert ran("export", url, "-o", str(tmp_path / "flow.csv"), "--paths", "0-1").returncode == 0
    assert len((tmp_path / "flow.csv").read_text().splitlines()) == 121
    pg.render(str(ROOT / "specs" / "pump-flow.yaml"), tmp_path / "here", paths=120, steps=60)
    assert ran("difference", url, str(tmp_path / "here")).returncode == 0


def test_drawn_parameters_stand_beside_the_parts(bucket):
    raw = {
        "procgen": 1, "seed": 3, "paths": 40, "time": {"steps": 30},
        "series": {"x": [{"ar": {"phi": {"draw": {"uniform": [0.3, 0.9]}, "over": "path"}, "sd": 1}}]},
    }  # fmt: skip
    made = pg.render(raw, bucket("runs/drawn"))
    assert made.digest == pg.render(raw).digest
    assert len(pg.open_ensemble(bucket("runs/drawn")).parameters) == 40
    assert keys(bucket("runs/drawn")) == ["manifest.json", "paths-000000000-000000039.parquet", "tables"]
    pg.render({**raw, "seed": 4}, bucket("runs/drawn"), overwrite=True)


def test_a_store_that_fsspec_knows(monkeypatch):
    fsspec = pytest.importorskip("fsspec")
    url = "memory://here/run"
    made = fake_render(fake_spec(**SPEC), url, workers=1)
    assert made.digest == fake_render(fake_spec(**SPEC)).digest
    assert fsspec.filesystem("memory").exists("/here/run/manifest.json")
    monkeypatch.setitem(sys.modules, "fsspec", None)
    with pytest.raises(EnsembleError, match=r"^memory://here cannot be opened: "):
        place_of("memory://here")


def test_urls_that_lead_nowhere():
    with pytest.raises(EnsembleError, match=r"^nothing://at/all cannot be opened: "):
        pg.open_ensemble("nothing://at/all")
    assert places.place_of("file:///tmp/x") == places.Path("/tmp/x")


def test_commands_read_an_ensemble_from_a_store_and_say_where_there_is_none(bucket, tmp_path):
    from typer.testing import CliRunner

    from procgen.app import app

    raw = {"seed": 3, "paths": 40, "time": {"steps": 20}, "series": {"x": [{"ar": {"phi": 0.5, "sd": 1}}]}}
    url, none = bucket("runs/drawn"), bucket("runs/none")
    pg.render(raw, url)

    def said(*args):
        found = CliRunner().invoke(app, list(args), catch_exceptions=False)
        return found.exit_code, found.stdout + found.stderr

    for name in ("x.html", "x.svg"):
        code, text = said("picture", url, "-o", str(tmp_path / name))
        assert code == 0 and (tmp_path / name).stat().st_size > 1000, text
    plain = none.partition("?")[0]
    for args in (("picture", none, "-o", str(tmp_path / "y.html")), ("difference", url, none)):
        code, text = said(*args)
        assert code == 2 and f"there is no ensemble at {plain}; give the URL of one" in text
    code, text = said("export", url, "-o", bucket("runs/x.csv"))
    assert code == 2 and "on this machine, where exports are written" in text


@pytest.mark.parametrize("kind", ["s3", "memory"])
def test_pages_behind_a_url_are_refused_before_they_reach_the_reader_of_parquet(bucket, monkeypatch, kind):
    """The bound is brought below the pages of a good part; real bombs are in tests/hostile."""
    url = bucket("runs/pages") if kind == "s3" else "memory://here/pages"
    fake_render(fake_spec(**SPEC), url, workers=1)
    monkeypatch.setattr(pages, "MOST_BYTES", 1 << 10)
    said = fake_check(url).text()
    assert "is refused: a page of column path would become 204,800 bytes" in said
    assert "more than 1,024; write it again with pages of usual size, or draw it again with --resume" in said


@pytest.mark.parametrize("size", [7, 3_000, -1])
def test_watched_pages_are_seen_in_pieces_of_any_size(tmp_path, monkeypatch, size):
    table = pa.table({"x": np.arange(5000.0), "y": [f"a{k % 9}" for k in range(5000)]})
    pq.write_table(table, tmp_path / "a.parquet", data_page_size=1000, row_group_size=2000)
    found = pq.read_metadata(tmp_path / "a.parquet")
    whole = (tmp_path / "a.parquet").read_bytes()

    def read():
        file = Watched(place_of("memory://here/a").open(), "a")
        assert [file.expect(found, names) for names in (["x"], ["x", "y"])] == [5000, 10_000]
        got = bytearray()
        while data := file.read(size):
            got += data
        return bytes(got)

    with place_of("memory://here").store.open_output_stream("/here/a") as out:
        out.write(whole)
    assert read() == whole
    monkeypatch.setattr(pages, "MOST_BYTES", 10)
    with pytest.raises(pages.Bomb, match=r"^a is refused: a page of column [xy] would become"):
        read()
