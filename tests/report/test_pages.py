"""Pages with pictures: well formed, self-contained, escaped, of bounded size, and saying what they show."""

import re
import shutil
import subprocess
from dataclasses import replace
from html import escape, unescape
from pathlib import Path

import numpy as np
import pytest

import procgen as pg
from procgen.checks.judge import unit
from procgen.checks.verdict import Check, Verdict
from procgen.checks.words import joined
from procgen.report.html import verdict_page, whole_page
from procgen.report.pictures.gallery import of_data, of_spec_alone
from procgen.report.pictures.safe import breakable, visible
from procgen.report.pictures.sample import of_ensemble, of_spec, of_table
from procgen.report.pictures.svg import poster
from tests.report.pages import drawing, ensemble, self_contained

HOSTILE = (
    "<script>alert(1)</script>\"'><img src=x onerror=y> ]]> &amp; </title></style> \u202egnp.exe\u2066 {{7*7}} $x^2$"
)
SPECS = Path(__file__).parent.parent.parent / "specs"
AR = [{"constant": 5}, {"ar": {"phi": 0.5, "sd": 1}}]
GARCH = [{"garch": {"omega": 0.1, "alpha": 0.1, "beta": 0.8}}]
WALK = [{"random_walk": {"sd": 1}}]
COUNTS = [{"constant": 3}, {"white_noise": {"sd": 2}}]
CASES = {
    "autoregression": ({"x": AR}, {}),
    "one path": ({"x": AR}, {"paths": 1}),
    "one path of a walk": ({"x": WALK}, {"paths": 1}),
    "a few paths": ({"x": AR, "y": GARCH}, {"paths": 5}),
    "one step": ({"x": AR, "y": WALK}, {"steps": 1}),
    "two steps": ({"x": AR, "y": GARCH}, {"steps": 2}),
    "nothing left to chance": ({"x": [{"constant": 5}], "y": [{"trend": {"level": 0, "slope": 1}}]}, {}),
    "counts": ({"x": {"type": "int64", "of": COUNTS}, "y": {"decimals": 0, "of": COUNTS}}, {}),
    "no start": ({"x": AR}, {"time": {"steps": 50}}),
    "many steps": ({"x": AR, "y": WALK}, {"steps": 900, "paths": 55}),
    "no moments": ({"x": [{"exp": [{"random_walk": {"sd": 0.1, "law": {"student_t": {"df": 5}}}}]}]}, {}),
    "heavy tails": ({"x": [{"white_noise": {"sd": 1, "law": {"student_t": {"df": 2.1}}}}]}, {}),
}


@pytest.mark.parametrize("name", CASES)
def test_any_ensemble_has_a_page_and_a_poster(name):
    series, size = CASES[name]
    found = ensemble(series, **size)
    shown = of_data(found)
    page = self_contained(whole_page(shown))
    assert page.seen.count("figure") == sum(len(charts) for _, charts in shown.groups) == page.seen.count("svg")
    assert page.seen.count("figcaption") == page.seen.count("desc") == page.seen.count("figure")
    drawing(poster("x", ["y"], shown.groups))
    text = " ".join(page.text)
    assert "scenarios of a stated model" in text and found.spec.digest() in text
    for _, charts in shown.groups:
        for chart in charts:
            assert chart.caption.endswith(".") and "nan" not in chart.caption and "None" not in chart.caption
            assert chart.x.low < chart.x.high and chart.y.low < chart.y.high


def test_what_a_page_holds_and_in_which_order():
    found = ensemble({"x": AR, "y": GARCH}, paths=120, reveal="all", title="Two things")
    text = verdict_page(pg.validate(found, false_alarm=1e-8))
    page = self_contained(text)
    order = ["<h1>Two things", 'class="verdict', 'id="series-0"', 'id="series-1"', 'id="between"', 'id="checks"']
    order += ['id="spec"', 'id="record"', "<footer>"]
    assert [text.index(mark) for mark in order] == sorted(text.index(mark) for mark in order)
    said = " ".join(page.text)
    squares = "Autocorrelation of squared deviations"
    for words in ("x[t] = 0.5 x[t−1] + a[t]", squares, "Parts of one path", "all 120 paths"):
        assert words in said
    assert "garch: {omega: 0.1, alpha: 0.1, beta: 0.8}" in said
    assert "@media print" in text and "prefers-color-scheme: dark" in text and 'name="viewport"' in text


def test_a_page_says_first_whether_all_could_be_judged():
    bent = {"hinge": {"of": [{"negative_binomial": {"mean": 0.3, "size": 0.3}}], "below": 1}}
    for body, said in (([bent], "Agrees in part"), (AR, "Agrees with its spec")):
        verdict = pg.validate(ensemble({"x": body}, paths=120), false_alarm=1e-8)
        text = verdict_page(verdict)
        assert verdict.verdict == "agrees" and f'class="verdict agrees">{said}' in text


@pytest.mark.parametrize("file", sorted(SPECS.glob("*.yaml"))[::4], ids=lambda file: file.stem)
def test_every_fourth_spec_of_the_gallery_has_pictures(file):
    spec = pg.load(file)
    shown = of_data(pg.render(spec, paths=55, steps=min(spec.time.steps, 72)))
    assert [len(section.charts) > 0 for section in shown.sections] == [True] * len(spec.series)
    self_contained(whole_page(shown))


def test_a_page_may_load_nothing_and_run_nothing():
    policy = "default-src 'none'; style-src 'unsafe-inline'"
    assert f'<meta http-equiv="Content-Security-Policy" content="{policy}' in whole_page(of_data(ensemble({"x": AR})))


def test_a_long_spec_is_cut():
    table = {"seasonal": {"period": 20_000, "profile": [k / 7 for k in range(20_000)]}}
    text = whole_page(of_data(ensemble({"x": [table, *AR]}, paths=3, steps=10)))
    assert len(text) < 200_000 and "…</pre>" in text


def test_what_departs_stands_first_and_at_its_series():
    found = ensemble({"x": AR, "y": GARCH}, paths=200)
    stated = pg.load({**found.spec.raw, "series": {"x": [{"constant": 5}, {"ar": {"phi": 0.1, "sd": 1}}], "y": GARCH}})
    verdict = pg.validate(found.to_pandas(), stated, false_alarm=1e-8)
    text = verdict_page(verdict)
    self_contained(text)
    assert verdict.agrees is False and verdict.headline
    for told in verdict.told:
        assert f'<li><p class="cause">{breakable(told.cause)}</p>' in text
    assert text.index("What departs") < text.index('id="series-0"')
    section = text[text.index('id="series-0"') : text.index('id="series-1"')]
    assert '<ul class="found">' in section
    assert '<ul class="found">' not in text[text.index('id="series-1"') : text.index('id="checks"')]
    assert text.index('<tr class="departs">') < text.index('<tr class="agrees">')


def test_what_may_follow_from_a_departure_stands_in_its_box():
    """One box a cause, on top and at the series, in the order of the line in the terminal."""
    found = ensemble({"x": AR, "y": GARCH}, paths=200)
    stated = pg.load({**found.spec.raw, "series": {"x": [{"constant": 4.5}, AR[1]], "y": GARCH}})
    verdict = pg.validate(found.to_pandas(), stated, false_alarm=1e-8)
    (told,) = verdict.told
    assert told.line == verdict.headline[0] and len(told.effects) > 1 and told.cause.startswith("x: level: ")
    top, at_series = boxes(verdict_page(verdict))
    assert top == (told.cause, [f"also {joined(told.effects)}, which may follow from it"])
    cause, effects = at_series
    assert cause == told.cause.removeprefix("x: ")
    assert tuple(line.partition(":")[0] for line in effects) == told.effects


def boxes(text):
    """Of each box of what departs, the cause and the lines below it."""
    inside = r'<li><p class="cause">(.*?)</p>(?:\s*<p class="effects">.*?</p>)?\s*'
    inside += r'(?:<ul class="effects">(.*?)</ul>)?\s*</li>'
    for cause, effects in re.findall(inside, text, re.DOTALL):
        yield plain(cause), [plain(line) for line in re.findall("<li>(.*?)</li>", effects)]


def plain(text):
    return unescape(text.replace("<wbr>", ""))


# escaping


def test_nothing_that_is_written_becomes_markup():
    series = {"x": {"unit": HOSTILE, "note": HOSTILE, "of": AR}, "y": {"unit": "]]>", "of": GARCH}}
    found = ensemble(series, paths=30, title=HOSTILE)
    for text in (verdict_page(pg.validate(found)), whole_page(of_data(found))):
        page = self_contained(text)
        said = "".join(page.text)
        assert visible(HOSTILE) in said and "<script>alert(1)</script>" in said
        assert escape(visible(HOSTILE)) in text
        assert not set("\u202e\u2066") & set(text)
    svg = poster(HOSTILE, [HOSTILE], of_data(found).groups)
    tree = drawing(svg)
    assert {e.tag.rpartition("}")[2] for e in tree.iter()} <= set(
        "svg title desc style rect g text path circle clipPath".split()
    )
    assert not set("\u202e\u2066") & set(svg)


def test_a_verdict_of_hostile_names_alone():
    row = Check(HOSTILE, HOSTILE, HOSTILE, "memory", outcome="untestable", note=HOSTILE)
    verdict = Verdict([row], 0.001, {"title": HOSTILE, "digest": HOSTILE, "spec_digest": "\ud800\x00"})
    page = self_contained(verdict_page(verdict))
    assert "".join(page.text).count(visible(HOSTILE)) >= 4
    assert "‹U+D800›‹U+0000›" in "".join(page.text)


def test_names_of_files_are_escaped(tmp_path):
    out = tmp_path / "<b>&\"'"
    found = pg.render(ensemble({"x": AR}).spec, out=out, workers=1)
    page = self_contained(whole_page(of_data(found)))
    assert str(out) in "".join(page.text)
    assert found.digest in "".join(page.text) and "values made by" in page.text


# sizes


def test_pages_stay_small_however_many_paths_and_checks():
    time = {"start": "2027-01-04T00:00", "every": "15min", "steps": 2688}
    kinds = [AR, GARCH, WALK, [{"exp": AR}], [{"seasonal": {"period": 96, "harmonics": [{"amplitude": 1}]}}, *AR]]
    series = {f"s{i}": kinds[i % 5] for i in range(20)}
    twenty = of_data(ensemble(series, paths=55, time=time))  # enough paths for every curve
    rows = [Check.of(f"s{i % 20}", "covariance", f"step {i}", "memory", unit(0.1, 0.001)) for i in range(4000)]
    shown = whole_page(twenty, Verdict(rows, 0.001, {"title": "Twenty"}))
    assert len(shown.encode()) < 3_000_000
    self_contained(shown)
    five = replace(twenty, sections=twenty.sections[:5])
    assert len(whole_page(five, Verdict(rows, 0.001, {})).encode()) < 1_000_000


def test_many_paths_make_no_longer_a_page():
    few, many = (len(whole_page(of_data(ensemble({"x": AR}, paths=n)))) for n in (100, 1000))
    assert many < 1.1 * few


# what is read, and what is said of it


def test_a_sample_is_spread_over_all_paths_and_says_so(tmp_path):
    found = ensemble({"x": AR, "y": GARCH}, paths=90, steps=50)
    stored = pg.render(found.spec, out=tmp_path / "e", workers=1)
    for each in (found, stored, found.paths(20, 90)):
        some = of_ensemble(each, limit=2 * 50 * 19 + 3)
        first, last = each.whole.first_path, each.whole.end_path - 1
        rows = [np.flatnonzero((found["y"] == row).all(axis=1)).item() for row in some.values["y"]]
        assert len(rows) == 19 and rows == sorted(set(rows)) and (rows[0], rows[-1]) == (first, last)
        assert np.array_equal(some.values["x"], found["x"][rows])
        assert np.diff(rows).max() <= 2 * len(found["x"]) / 8
        assert some.says == f"19 of {each.whole.paths} paths, from stretches that are spread over all of them"
    short = of_ensemble(stored, limit=40)
    assert np.array_equal(short.values["x"], found["x"][:1, :20])
    assert short.says.endswith(", the first 20 of 50 steps")
    assert of_ensemble(found).says == "all 90 paths"


def test_of_very_many_series_those_that_depart_are_shown():
    series = {f"s{k}": AR for k in range(30)}
    found = ensemble(series, paths=4, steps=10)
    assert list(of_ensemble(found, first=["s29"]).values) == [f"s{k}" for k in range(23)] + ["s29"]
    assert of_ensemble(found).says == "all 4 paths; 24 of 30 series"
    page = self_contained(whole_page(of_data(found)))
    assert "series-23" in page.ids and "series-24" not in page.ids


def test_a_table_is_sampled_as_an_ensemble_is():
    found = ensemble({"x": AR, "y": GARCH}, paths=90, steps=50)
    table = pg.validate(found.to_pandas(), found.spec).origin
    same = of_ensemble(found, limit=5000)
    assert np.array_equal(of_table(table, limit=5000).values["y"], same.values["y"])


def test_a_spec_alone_shows_paths_that_it_would_have():
    spec = pg.load({"procgen": 1, "seed": 3, "paths": 900, "time": {"steps": 30}, "series": {"x": AR}})
    drawn = of_spec(spec)
    assert drawn.says == "200 paths drawn for this picture, of the 900 of the spec"
    assert np.array_equal(drawn.values["x"], pg.render(spec, paths=200)["x"])
    assert set(drawn.parts) == {"x.constant", "x.ar"}
    assert "Nothing has been judged" in whole_page(of_spec_alone(spec))


def test_a_damaged_part_leaves_a_page(tmp_path):
    out = tmp_path / "e"
    pg.render(ensemble({"x": AR}, paths=60).spec, out=out, workers=1, reveal="all")
    (part,) = out.glob("*.parquet")
    data = bytearray(part.read_bytes())
    data[: len(data) // 2] = bytes(len(data) // 2)
    part.write_bytes(bytes(data))
    verdict = pg.validate(out)
    assert verdict.agrees is not True
    page = self_contained(verdict_page(verdict))
    assert "cannot be read" in " ".join(page.text)


def test_an_ensemble_is_shown_against_the_spec_that_it_was_held_against():
    found = ensemble({"x": AR, "y": GARCH}, paths=60, reveal="all")
    other = pg.load({**found.spec.raw, "series": {"x": [{"constant": 9}, {"ar": {"phi": 0.5, "sd": 1}}], "y": GARCH}})
    page = self_contained(verdict_page(pg.validate(found, other)))
    said = " ".join(page.text)
    assert "x[t] = 9" in said and "x[t] = 5" not in said
    assert f"SHA-256 of the spec that they are held against {other.digest()}" in said
    assert said.count(found.spec.digest()) == said.count(f"they were drawn from {found.spec.digest()}") == 1
    assert page.seen.count("nav") == 0 and "x__ar" not in "".join(page.ids)  # a revealed term is no series


def test_a_path_that_leaves_the_frame_is_said_to():
    found = ensemble({"x": [{"white_noise": {"sd": 1, "law": {"student_t": {"df": 2.1}}}}]}, paths=60, steps=300)
    first = of_data(found).sections[0].charts[0]
    assert first.caption.endswith(" Paths leave the frame.") == (np.abs(found["x"][:4]).max() > first.y.high)
    assert first.caption.endswith(" Paths leave the frame.")


def test_values_that_are_missing_leave_gaps():
    found = ensemble({"x": AR}, paths=30)
    table = found.to_pandas()
    table.loc[table.index % 7 == 3, "x"] = np.nan
    self_contained(verdict_page(pg.validate(table, found.spec)))
    table["x"] = np.nan
    self_contained(verdict_page(pg.validate(table, found.spec)))


def test_a_page_is_the_same_every_time():
    found = ensemble({"x": AR, "y": GARCH})
    assert whole_page(of_data(found)) == whole_page(of_data(found))


# in a browser, where there is one

BROWSER = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)


@pytest.mark.skipif(BROWSER is None, reason="no Chromium on the PATH")
@pytest.mark.parametrize("width", [390, 1280])
def test_nothing_overflows_in_a_browser(width, tmp_path):
    found = ensemble(
        {"a_series_with_quite_a_long_name": {"unit": "m³/h", "of": AR}, "y": GARCH}, paths=120, reveal="all"
    )
    text = verdict_page(pg.validate(found))
    inner = escape(text)
    measure = (
        "<script>onload = () => { const d = document.querySelector('iframe').contentDocument; const w = "
        "d.documentElement.clientWidth; const far = [...d.querySelectorAll('figure, pre, p, ul, dl, h1, h2')].filter("
        "e => e.getBoundingClientRect().right > w + 1).length; const f = d.querySelectorAll('figure'); "
        "const two = f[0].getBoundingClientRect().top == f[1].getBoundingClientRect().top; "
        "document.title = [d.documentElement.scrollWidth, w, far, two].join(' '); }</script>"
    )
    frame = tmp_path / "frame.html"
    frame.write_text(f'<iframe width="{width}" height="800" style="border:0" srcdoc="{inner}"></iframe>{measure}')
    options = "--headless --no-sandbox --disable-gpu --no-first-run --disable-background-networking --disable-quic"
    options += " --disable-component-update --disable-sync --virtual-time-budget=3000"
    options += f" --user-data-dir={tmp_path / 'profile'}"
    done = subprocess.run(
        [str(BROWSER), *options.split(), "--dump-dom", frame.as_uri()], capture_output=True, text=True, timeout=60
    )
    title = done.stdout.partition("<title>")[2].partition("</title>")[0]
    scroll, client, far, two = title.split()
    assert (int(scroll), int(far)) == (int(client), 0)
    assert two == ("true" if width > 820 else "false")
