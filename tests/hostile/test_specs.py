"""Specs from strangers, and what they put on a terminal."""

import json
import os
import time

import pytest
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from procgen.chance.laws import LAWS
from procgen.report.letters import tame
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from tests.hostile.commands import HEAD
from tests.studies.hostile import OBEYED, SECONDS


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


def test_many_harmonics_are_read_in_time_and_each_step_of_a_cycle_is_worked_out_once():
    text = ", ".join(["{amplitude: 1, peak: 3}"] * 11_000)
    begin = time.process_time()
    spec = read_text(f"{HEAD}series:\n  x: {{seasonal: {{period: 12, harmonics: [{text}]}}}}\n", catalogue(), LAWS)
    assert len(spec.raw["series"]["x"]["seasonal"]["harmonics"]) == 11_000
    assert time.process_time() - begin < 3 * SECONDS
    begin = time.process_time()
    assert pg.theory(spec)["x"].mean([3])[0] == 11_000  # all are highest there
    assert time.process_time() - begin < 2 * SECONDS


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
