"""A verdict as text and as a page."""

from html.parser import HTMLParser

import pytest

from procgen.checks.judge import unit
from procgen.checks.verdict import Check, Verdict
from procgen.report.html import verdict_page
from procgen.report.text import CAUTION, bar

ABOUT = {"title": "<b>Cold</b> & store", "paths": 2000, "steps": 500, "digest": "ab" * 32, "spec_digest": "cd" * 32}


def verdict(z=(1.0, 9.0)):
    rows = [Check.of("load", "shocks: variance", "all steps", "spread", unit(x, 0.001, theory=1.0)) for x in z]
    rows.append(Check("x<script>", "covariance", "", "memory", outcome="untestable", note="no <variance> & more"))
    return Verdict(rows, 0.001, ABOUT)


def test_text_says_it_all():
    text = verdict().text()
    assert text.startswith("DEPARTS from what the spec states\n  load: spread: the variance is larger than stated")
    assert "2,000 paths × 500 steps; 3 checks: 1 agrees, 1 departs, 1 untestable" in text
    assert "a shock variance off by a factor of 1 ± 0.0048" in text  # (3.4808 + 1.2816) / 1000 at level 0.001 / 2
    assert "x<script>: covariance: no <variance> & more" in text
    assert " ".join(text.split()).endswith(CAUTION)


def test_text_of_the_other_outcomes():
    agrees = Verdict(verdict(z=(0.2,)).rows[:1], 0.001, ABOUT).text()
    assert agrees.startswith("AGREES on spread only: level, memory, clustering, law and dependence of load")
    assert "load: spread; not judged: level, memory" in agrees
    both = verdict(z=(0.2,))
    assert both.agrees is True and both.title.startswith("AGREES on a part only") and "x<script>" in both.title
    alone = Verdict([row for row in both.rows if row.series == "x<script>"], 0.001, ABOUT)
    assert alone.agrees is None
    assert alone.text().startswith("CANNOT BE JUDGED: no check of the behaviour could be made")
    assert verdict(z=()).text().startswith("CANNOT BE JUDGED")


@pytest.mark.parametrize(
    ("p", "level", "expected"),
    [(0.0, 5.0, "········│···"), (2.5, 5.0, "████····│···"), (5.0, 5.0, "████████│···"), (50.0, 5.0, "████████████")],
)
def test_bar(p, level, expected):
    assert bar(-p * 2.302585092994046, level) == expected
    assert bar(float("-inf"), level) == "█" * 12


class Page(HTMLParser):
    """Counts tags and checks that they are closed."""

    VOID = frozenset({"meta", "wbr"})

    def __init__(self):
        super().__init__()
        self.open, self.seen, self.links = [], [], []

    def handle_starttag(self, tag, attrs):
        self.seen.append(tag)
        self.links += [value for name, value in attrs if name in ("src", "href")]
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag


def test_page_is_well_formed_self_contained_and_escaped(tmp_path):
    file = verdict().to_html(tmp_path / "v.html")
    text = file.read_text(encoding="utf-8")
    page = Page()
    page.feed(text)
    assert page.open == []
    assert page.links == []
    assert "script" not in page.seen
    assert "url(" not in text
    assert "<b>Cold" not in text
    assert "&lt;b&gt;Cold&lt;/b&gt; &amp; store" in text
    assert "no &lt;variance&gt; &amp; more" in text
    assert page.seen.count("tr") == 3 + 2  # rows, and the heads of two tables
    assert "prefers-color-scheme: dark" in text


def test_page_shows_departures_first():
    text = verdict_page(verdict())
    assert (
        text.index('<tr class="departs">') < text.index('<tr class="agrees">') < text.index('<tr class="untestable">')
    )
    assert "scenarios of a stated model" in text


def departing(series="a_long_name_of_a_series"):
    rows = [Check.of(series, "shocks: variance", "all steps", "spread", unit(x, 0.001, theory=1.0)) for x in (9.0, 8.0)]
    return Verdict(rows, 0.001, {**ABOUT, "paths": 1})


def test_text_counts_in_singular_and_plural():
    text = departing().text()
    assert "1 path × 500 steps; 2 checks: 2 depart\n" in text
    assert "2,000 paths × 500 steps; 1 check: 1 agrees\n" in Verdict(verdict(z=(0.2,)).rows[:1], 0.001, ABOUT).text()


def test_page_says_once_that_it_departs_and_lets_long_names_break():
    head = verdict_page(departing()).partition("<body>")[2].partition("</header>")[0]
    assert head.count("Departs from") == 1 and "DEPARTS" not in head
    assert "1 path × 500 steps. 2 checks: 2 depart." in head
    assert "a_<wbr>long_<wbr>name_<wbr>of_<wbr>a_<wbr>series: spread" in verdict_page(departing())
    assert "AGREES on spread only" in verdict_page(Verdict(verdict(z=(0.2,)).rows[:1], 0.001, ABOUT))


def test_a_drawn_parameter_and_squares_are_told_in_words():
    law = Check.of("", "parameter pull: distribution function", "all paths", "law", unit(9.0, 0.02))
    squares = Check.of("y", "slope of squares", "lag 1", "clustering", unit(9.0, 0.02))
    lines = Verdict([law, squares], 0.001).headline
    assert "(the distribution function of parameter pull is off by up to 0.18, p 2.3e−19)" in lines[0]
    assert "slope of squares on earlier squares at lag 1 is " in lines[1]


def test_a_departure_that_cannot_be_is_not_called_the_smallest_one_found():
    """Of 20 shocks no correlation is certain to be found, and no variance that is too small."""

    def of(what, error, theory=0.0):
        return Check.of("x ~ y" if what.endswith("series") else "x", what, "", "memory", unit(0.1, error, theory))

    few = [of("shocks: variance", 0.4, 1.0), of("shocks: autocorrelation", 0.25), of("shocks: clustering", 0.1)]
    text = " ".join(Verdict(few, 0.001).text().split())
    assert "a shock variance off by a factor of 1 + 1.9, while no smaller one is certain to be found; " in text
    assert "; no correlation between shocks of one path is certain to be found; a correlation of 0.4" in text
    assert verdict_page(Verdict(few, 0.001)).count('<td class="n">none</td>') == 1
    pair = of("shocks: correlation between series", 0.3, 0.5)  # from 0.5 to −1 is 1.5, and 1.4 is found
    assert "a correlation between series' shocks off by 1." in " ".join(Verdict([pair], 0.001).text().split())
    pair = of("shocks: correlation between series", 0.4, 0.5)
    text = " ".join(Verdict([pair], 0.001).text().split())
    assert "x ~ y: no wrong correlation between series' shocks is certain to be found" in text
