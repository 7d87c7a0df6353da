"""The numbers in a picture are those of the theory and of the sample; colours can be read by everyone."""

import re

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from procgen.report.pictures.chart import Axis, Band, Cells, Chart, Dots, Line, Note, Stems
from procgen.report.pictures.gallery import of_data
from procgen.report.pictures.style import DARK, LIGHT
from procgen.report.pictures.svg import figure, poster
from tests.report.pages import drawing, ensemble, of_class, points, scale

FLOW = {
    "flow": {
        "unit": "m³/h",
        "of": [
            {"constant": 80},
            {"seasonal": {"period": "1d", "harmonics": [{"amplitude": 12, "peak": "18:00"}]}},
            {"ar": {"phi": 0.8, "sd": 3}},
        ],
    }
}


@pytest.fixture(scope="module")
def flow():
    """Values (paths, steps) and the charts by their titles."""
    found = ensemble(FLOW, paths=60, steps=60)
    charts = {chart.title: chart for chart in of_data(found).sections[0].charts}
    return found["flow"], charts


def placed(chart):
    tree = drawing(figure(chart, "f"))
    return tree, *scale(tree, chart)


def near(chart, axis="y"):
    """How much data a tenth of a unit is."""
    across = chart.y if axis == "y" else chart.x
    return (across.high - across.low) / 1500


def test_a_fan_has_the_stated_quantiles_and_those_of_the_sample(flow):
    values, charts = flow
    chart = charts["Paths of flow (m³/h)"]
    tree, x, y = placed(chart)
    steps = np.arange(60)
    mean = 80 + 12 * np.cos(2 * np.pi * (steps - 18) / 24)
    area = points(of_class(tree, "area", "stated")[2].get("d").replace("L", "M"))  # behind two of the key
    there, back = area[:60], area[60:][::-1]
    # AR(1): sd 3/√(1 − φ²) = 5 (Box & Jenkins 1970, ch. 3); 1.6449 is the normal 95 % point of any table.
    assert x(there[:, 0]) == pytest.approx(steps, abs=near(chart, "x"))
    assert y(there[:, 1]) == pytest.approx(mean - 5 * 1.6449, abs=near(chart))
    assert y(back[:, 1]) == pytest.approx(mean + 5 * 1.6449, abs=near(chart))
    seen = [points(e.get("d")) for e in of_class(tree, "line", "seen")[1:]]
    for line, level in zip(seen, (5, 50, 95), strict=True):
        assert y(line[:, 1]) == pytest.approx(np.percentile(values, level, axis=0), abs=near(chart))
    paths = [points(e.get("d")) for e in of_class(tree, "line", "path")[1:]]
    assert y(paths[0][:, 1]) == pytest.approx(values[0], abs=near(chart))
    share = 100 * np.mean(np.abs(values - mean) <= 5 * stats.norm.ppf(0.95))
    assert chart.caption.startswith(f"{share:.1f} % of the values of 60 paths")


def test_a_correlogram_has_both(flow):
    values, charts = flow
    chart = charts["Autocorrelation"]
    tree, x, y = placed(chart)
    dots = np.array(re.findall(r"M(-?\d+) (-?\d+)a", of_class(tree, "dot", "stated")[1].get("d")), int)
    assert x(dots[:, 0] + 33) == pytest.approx(np.arange(30), abs=near(chart, "x"))
    assert y(dots[:, 1]) == pytest.approx(0.8 ** np.arange(30), abs=near(chart))
    d = values - values.mean(axis=0)
    products = [np.mean([np.mean(p[k:] * p[: 60 - k]) for p in d]) for k in range(30)]
    stems = np.array(re.findall(r"V(-?\d+)", of_class(tree, "stem")[1].get("d")), int)
    assert y(stems) == pytest.approx(np.array(products) / products[0], abs=near(chart))


def test_variances_densities_and_quantiles_have_both(flow):
    values, charts = flow
    chart = charts["Variance against the step, (m³/h)²"]
    tree, _, y = placed(chart)
    assert y(points(of_class(tree, "line", "stated")[1].get("d"))[:, 1]) == pytest.approx(25, abs=near(chart))
    dots = np.array(re.findall(r"M-?\d+ (-?\d+)a", of_class(tree, "dot", "seen")[1].get("d")), int)
    at = np.unique(np.linspace(0, 59, 48).round().astype(int))
    assert y(dots) == pytest.approx(values.var(axis=0, ddof=1)[at], abs=near(chart))

    chart = charts["Density over all steps, less the mean"]
    tree, x, y = placed(chart)
    curve = points(of_class(tree, "line", "stated")[1].get("d"))
    assert y(curve[:, 1]) == pytest.approx(stats.norm(0, 5).pdf(x(curve[:, 0])), abs=2 * near(chart))

    chart = charts["Quantiles of the sample against stated ones"]
    tree, x, y = placed(chart)
    dots = np.array(re.findall(r"M(-?\d+) (-?\d+)a", of_class(tree, "dot", "seen")[1].get("d")), int)
    mean = 80 + 12 * np.cos(2 * np.pi * (59 - 18) / 24)
    ranks = stats.beta(np.arange(1, 61), 60 - np.arange(60)).median()
    assert y(dots[:, 1]) == pytest.approx(np.sort(values[:, 59]), abs=near(chart))
    assert x(dots[:, 0] + 33) == pytest.approx(stats.norm(mean, 5).ppf(ranks), abs=near(chart, "x"))


def test_the_numbers_stand_below_as_well(flow):
    _, charts = flow
    chart = charts["Autocorrelation"]
    assert chart.head == ("lag", "stated", "seen", "from", "to")
    assert chart.rows[1][:2] == ("1", "0.8")
    assert float(chart.rows[1][3]) < 0.8 < float(chart.rows[1][4])
    assert all(len(row) == len(each.head) for each in charts.values() for row in each.rows)


def test_two_series_and_what_they_share():
    two = {"a": [{"white_noise": {"sd": 1}}], "b": [{"white_noise": {"sd": 2}}], "c": [{"white_noise": {"sd": 1}}]}
    found = ensemble(
        two, paths=200, steps=30, correlation=[{"between": ["a.white_noise", "b.white_noise"], "value": 0.6}]
    )
    matrix, cross = of_data(found).shared
    rows = {row[:2]: row[2:] for row in matrix.rows}
    assert rows["a", "b"][0] == "0.6" and rows["a", "c"][0] == "0"
    a, b = (found[name] - found[name].mean(axis=0) for name in "ab")
    assert float(rows["a", "b"][1]) == pytest.approx((a * b).sum() / np.sqrt((a * a).sum() * (b * b).sum()), rel=1e-4)
    assert cross.title == "a at t + lag with b at t"
    assert [float(row[1].replace("−", "-")) for row in cross.rows] == pytest.approx([0] * 12 + [0.6] + [0] * 12)


def test_parts_of_a_path_and_its_states():
    regimes = {
        "branches": {"calm": [{"white_noise": {"sd": 1}}], "storm": [{"white_noise": {"sd": 5}, "as": "wild"}]},
        "durations": {"calm": 12, "storm": 6},
    }
    found = ensemble({"x": [{"constant": 3}, {"regimes": regimes}]}, reveal="all")
    strip = of_data(found).shared[-1]
    assert strip.title == "Parts of one path"
    notes = [mark.text for mark in strip.marks if isinstance(mark, Note)]
    assert "x.regimes.regime: from below calm, storm" in notes
    assert not any("constant" in note for note in notes)  # it never moves
    (cells,) = [mark for mark in strip.marks if isinstance(mark, Cells)]
    states = found["x.regimes.regime"][0]
    corners = np.asarray(cells.corners)
    seen = np.concatenate([[float(low > corners[:, 2].min() + 1e-9)] * round(b - a) for a, b, low, _ in corners])
    assert seen.tolist() == states.tolist()


def test_every_mark_is_drawn_in_its_place_and_gaps_are_left():
    marks = [
        Band([0, 1, 2], [0, 0, np.nan], [1, 1, 1], "chance", "band"),
        Line([0, 1, 2, 3], [0, np.nan, 1, 2], "seen", "line"),
        Dots([1], [1], "stated", "dots", [0.5], [1.5]),
        Stems([0, 2], [1, np.nan], "seen", "stems"),
        Cells([[0, 1, 0, 1], [1, 2, np.nan, 1]], "seen", "cells", [0.5, 1]),
        Note(0.5, 0.5, "a < b"),
    ]
    chart = Chart("t", "c", Axis(0, 4, ((0.0, "0"),)), Axis(0, 2, ((0.0, "0"),)), marks)
    tree = drawing(figure(chart, "n"))
    assert points(of_class(tree, "line", "seen")[1].get("d")).shape == (3, 2)
    assert of_class(tree, "stem")[1].get("d").count("M") == 1
    assert len(of_class(tree, "cell")) == 2  # the key, and the one cell that is known
    assert [e.text for e in of_class(tree, "note")] == ["a < b"]
    assert len(chart.key) == 5


def test_a_poster_stands_alone(flow):
    _, charts = flow
    text = poster('A <b> & "c"', ["one", "two"], [("flow", list(charts.values()))])
    tree = drawing(text)
    assert tree.get("role") == "img" and "prefers-color-scheme: dark" in text
    assert tree[0].text == 'A <b> & "c"'
    width, height = map(int, tree.get("viewBox").split()[2:])
    for group in of_class(tree, "fig"):
        x, y = map(int, re.findall(r"\d+", group.get("transform")))
        assert x + 4800 <= width and y + 2800 <= height
    assert len(of_class(tree, "title")) == len(charts)
    assert "http" not in text.replace("http://www.w3.org/2000/svg", "")


# colours: WCAG 2.1, 1.4.3 (text 4.5 : 1) and 1.4.11 (graphics 3 : 1)


def luminance(color):
    parts = [int(color[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    red, green, blue = (c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts)
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


def contrast(one, other):
    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def test_contrast_is_that_of_the_guidelines():
    assert contrast("#ffffff", "#000000") == pytest.approx(21)
    assert contrast("#777777", "#ffffff") == pytest.approx(4.48, abs=0.01)  # the well-known grey just too light
    assert contrast("#767676", "#ffffff") > 4.5


@pytest.mark.parametrize("theme", [LIGHT, DARK], ids=["light", "dark"])
def test_colours_can_be_read(theme):
    for ground in (theme["paper"], theme["card"]):
        for name in ("ink", "soft", "good", "bad", "open", "stated"):
            assert contrast(theme[name], ground) >= 4.5, name
        for name in ("path", "alarm"):
            assert contrast(theme[name], ground) >= 3.0, name
    assert LIGHT.keys() == DARK.keys()


def test_what_is_stated_is_in_the_blues_of_okabe_and_ito():
    # Okabe & Ito (2008), Color Universal Design: blue 0, 114, 178; sky blue 86, 180, 233; vermillion 213, 94, 0;
    # orange 230, 159, 0.
    assert (LIGHT["stated"], DARK["stated"]) == ("#0072b2", "#56b4e9")
    assert (LIGHT["alarm"], DARK["alarm"]) == ("#d55e00", "#e69f00")


def test_a_fan_shows_the_record_that_it_leaves_from():
    record = [71.0, 74.5, 78.0, 75.0]
    body = {"flow": {"of": FLOW["flow"]["of"], "before": record}}
    fan = of_data(ensemble(body, paths=60, steps=60)).sections[0].charts[0]
    (line,) = [mark for mark in fan.marks if isinstance(mark, Line) and mark.label == "recorded before step 0"]
    assert np.array_equal(line.x, [-4, -3, -2, -1]) and np.array_equal(line.y, record)
    assert fan.x.low == -4 and fan.y.low < 71.0


def test_points_off_a_quantile_plot_are_called_too_few_only_where_they_are():
    """One sample is drawn as stated, and the same one twice as wide."""
    import procgen as pg
    from procgen.report.pictures.gallery import of_verdict

    spec = {"procgen": 1, "seed": 3, "paths": 200, "time": {"steps": 20}, "series": {"x": [{"white_noise": {"sd": 1}}]}}
    values = np.random.default_rng(2).normal(size=(200, 20))
    paths, steps = np.indices(values.shape).reshape(2, -1)
    for times, few in ((1.0, False), (2.0, True)):
        table = pd.DataFrame({"path": paths, "step": steps, "x": times * values.ravel()})
        (section,) = of_verdict(pg.validate(table, spec)).sections
        (caption,) = [chart.caption for chart in section.charts if chart.title.startswith("Quantiles")]
        assert "or more do in 99 of 100 samples" in caption and ("too few: " in caption) is few, caption


def test_parts_of_a_path_stand_under_a_heading_of_their_own():
    import procgen as pg
    from procgen.report.pictures.gallery import of_spec_alone

    head = {"procgen": 1, "seed": 3, "paths": 30, "time": {"steps": 40}}
    body = [{"white_noise": {"sd": 1}}, {"trend": {"level": 1, "slope": 0.1}}]
    one, two = (pg.load(head | {"series": {name: body for name in names}}) for names in ("x", "xy"))
    assert of_spec_alone(one).groups[-1][0] == "Within a path"
    assert of_spec_alone(two).groups[-1][0] == "Between series and within a path"


def test_the_key_of_a_png_covers_no_mark(flow):
    """It stands above the axes, as matplotlib lays it out."""
    pytest.importorskip("matplotlib")
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    from procgen.report.pictures.png import _drawn

    keys = 0
    for chart in flow[1].values():
        sheet = Figure(figsize=(5.6, 3.9), layout="constrained")
        FigureCanvasAgg(sheet)
        axes = sheet.add_subplot()
        _drawn(axes, "flow", chart)
        sheet.canvas.draw()
        key = axes.get_legend()
        keys += key is not None
        assert key is None or key.get_window_extent().y0 >= axes.get_window_extent().y1 - 1.0
    assert keys > 3
