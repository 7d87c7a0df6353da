"""The study of false alarms in its quick mode: true ensembles are not flagged too often, and it can be resumed.

Seeds are fixed. The counts of a right validator go beyond their limits with probability at most 1e-8 each, 6e-8 in all.
The full study is `python tests/studies/false_alarms.py`.
"""

import json
import sys
from collections import Counter

import pytest
from scipy import stats

from procgen.chance.laws import LAWS
from procgen.terms import catalogue
from tests.studies import departures, false_alarms
from tests.studies.departures import draw, spec_of
from tests.studies.false_alarms import LEVELS, Tally
from tests.studies.families import FAMILIES, OFTEN, stated, words

OUTSIDE = 1e-8
SMALL = ((1, 600), (30, 100), (150, 40))  # paths, steps
QUICK = ("white noise", "seasonal", "laplace", "garch", "lognormal", "product")
SEEDS = range(1, 6)


def too_often(tally):
    """Levels at which a right validator flags so many runs with probability at most 1e-8."""
    return [level for level in LEVELS if tally.flagged[level] > stats.binom.isf(OUTSIDE, tally.runs, level)]


def pooled(*tallies):
    total = Tally()
    for tally in tallies:
        total.merge(tally)
    return total


def test_every_kind_and_every_law_is_in_some_family():
    # A new term or law must be added to tests/studies/families.py, so that its false alarms are counted.
    used = set(words(dict(FAMILIES)))
    assert set(catalogue()) - used == set()
    assert set(LAWS) - used == {"normal"}  # the law of what says none


def test_families_can_be_read():
    for family in FAMILIES:
        spec_of(stated(family, 60), 2, 60, 1)


def test_true_ensembles_are_flagged_no_more_often_than_said():
    tallies = [false_alarms.run(family, shape, SEEDS) for family in QUICK for shape in SMALL]
    total = pooled(*tallies)
    assert total.runs == len(QUICK) * len(SMALL) * len(SEEDS)
    assert too_often(total) == [], total.lines


def test_a_wrong_validator_is_flagged_too_often():
    # White noise of 4 % more spread than stated, as if the validator had its variance wrong.
    tally = Tally()
    for seed in SEEDS:
        values = draw(spec_of([{"white_noise": {"sd": 1.04}}], 150, 40, seed))
        tally.add(departures.verdict([{"white_noise": {"sd": 1}}], values))
    assert 0.001 in too_often(tally)


def test_the_jobs_are_as_many_as_asked_for():
    runs = Counter()
    for family, _, seeds in false_alarms.jobs(2000, ""):
        runs[family] += len(seeds)
    assert set(runs) == set(FAMILIES)
    assert sum(runs.values()) >= 24_000
    assert min(runs[family] for family in OFTEN) >= 2000
    assert len(OFTEN) >= 12
    every = [(family, shape, seed) for family, shape, seeds in false_alarms.jobs(2000, "ar") for seed in seeds]
    assert len(set(every)) == len(every)


def test_no_two_families_share_a_seed():
    """Draws go by seed and names: two families with the same names and seeds would flag the same draws twice."""
    owner = {}
    for family, _, seeds in false_alarms.jobs(2000, ""):
        assert all(owner.setdefault(seed, family) == family for seed in seeds)


def test_a_tally_survives_its_line_of_json():
    tally = false_alarms.run("white noise", (1, 300), range(1, 3))
    tally.lines.append("x, mean: p 1e-05 of 9; ")
    again = Tally.from_dict(json.loads(json.dumps(tally.to_dict())))
    assert false_alarms.report({"a": again}) == false_alarms.report({"a": tally})
    assert again.runs == 2
    assert again.checks == tally.checks


@pytest.fixture
def counted(monkeypatch):
    """The study with runs that cost nothing; the jobs that were run."""
    ran = []

    def run(family, shape, seeds):
        ran.append(false_alarms._key(family, shape, seeds))
        return Tally(len(seeds), Counter({0.05: 1}), Counter({"mean": 3}))

    monkeypatch.setattr(false_alarms, "run", run)
    return ran


def test_what_is_done_is_left_out_when_it_is_resumed(counted, tmp_path, monkeypatch, capsys):
    out = tmp_path / "tallies.jsonl"
    monkeypatch.setattr(sys, "argv", ["study", "--quick", "--only", "garch", "--out", str(out)])
    false_alarms.main()
    whole, first = capsys.readouterr().out, list(counted)
    text = out.read_text()
    out.write_text(text[: text.rindex("\n") + 20])  # the last line was cut off
    counted.clear()
    monkeypatch.setattr(sys, "argv", [*sys.argv, "--resume"])
    false_alarms.main()
    assert counted == first[-1:]
    assert capsys.readouterr().out == whole
    assert whole.startswith("| family | runs | at 0.05 | at 0.01 | at 0.001 |\n| --- | --- | --- | --- | --- |\n")
