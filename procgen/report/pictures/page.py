"""The parts of a page that show charts, what is stated, and where it all came from."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

from procgen.report.pictures.chart import Chart
from procgen.report.pictures.gallery import Gallery, Section
from procgen.report.pictures.safe import breakable, escaped, short
from procgen.report.pictures.svg import figure
from procgen.spec.records import dataclass

WIDTH = 92  # letters of a line of an equation
MOST_TEXT = 60_000  # letters of a spec that are shown: one may hold tables
MANY = 3  # series from which a page begins with a list of them


@dataclass(frozen=True)
class Departure:
    """A sentence about what departs, and sentences about what may follow from it, under a heading of their own."""

    cause: str
    effects: Sequence[str] = ()
    heading: str = ""


def departures(found: Sequence[Departure]) -> Iterator[str]:
    """Each departure in a box, and in it, smaller, what may follow from it."""
    yield '<ul class="found">'
    for each in found:
        yield f'<li><p class="cause">{breakable(each.cause)}</p>'
        if each.effects:
            yield f'<p class="effects">{each.heading}</p>' if each.heading else ""
            yield '<ul class="effects">'
            yield from (f"<li>{breakable(line)}</li>" for line in each.effects)
            yield "</ul>"
        yield "</li>"
    yield "</ul>"


def contents(gallery: Gallery) -> Iterator[str]:
    """A list of the series, where there are many."""
    if len(gallery.sections) >= MANY:
        yield '<nav aria-label="Series"><ul>'
        for place, section in enumerate(gallery.sections):
            yield f'<li><a href="#series-{place}">{breakable(section.subject.name)}</a></li>'
        yield "</ul></nav>"


def series(gallery: Gallery, found: dict[str, Sequence[Departure]]) -> Iterator[str]:
    """A section for each series; `found` is what departs in it."""
    equations = _equations(gallery.sample.spec, [section.subject.name for section in gallery.sections])
    for place, section in enumerate(gallery.sections):
        yield f'<section class="series" id="series-{place}">'
        yield from _heading(section, found.get(section.subject.name, ()))
        text = equations.get(section.subject.name)
        if text:
            yield f"<pre>{escaped(short(text, MOST_TEXT))}</pre>"
        yield from figures(section.charts, f"s{place}")
        yield "</section>"
    if gallery.shared:
        yield f'<section id="between"><h2>{gallery.heading}</h2>'
        yield from figures(gallery.shared, "b")
        yield "</section>"


def _heading(section: Section, found: Sequence[Departure]) -> Iterator[str]:
    subject = section.subject
    unit = f' <span class="unit">{escaped(subject.unit)}</span>' if subject.unit else ""
    yield f"<h2>{breakable(subject.name)}{unit}</h2>"
    note = subject.sample.spec.series[subject.name].note
    if note:
        yield f'<p class="facts">{escaped(note)}</p>'
    verdict, reasons = subject.stated.theory.stationarity
    yield f"<p>Stated: {breakable('; '.join([verdict, *reasons]))}.</p>"
    if found:
        yield from departures(found)


def figures(charts: Sequence[Chart], name: str) -> Iterator[str]:
    """Figures side by side where there is room."""
    yield '<div class="figures phone">'
    for place, chart in enumerate(charts):
        yield f"<figure><h3>{breakable(chart.title)}</h3>{figure(chart, f'{name}-{place}')}"
        yield f"<figcaption>{breakable(chart.caption)}</figcaption>"
        yield from _numbers(chart)
        yield "</figure>"
    yield "</div>"


def _numbers(chart: Chart) -> Iterator[str]:
    if not chart.rows:
        return
    yield '<details><summary>The numbers</summary><div class="scroll"><table><thead><tr>'
    yield "".join(f'<th class="n" scope="col">{escaped(name)}</th>' for name in chart.head)
    yield "</tr></thead><tbody>"
    for row in chart.rows:
        yield "<tr>" + "".join(f'<td class="n">{escaped(cell)}</td>' for cell in row) + "</tr>"
    yield "</tbody></table></div></details>"


def provenance(gallery: Gallery) -> Iterator[str]:
    """The spec in full, and what the values are and what made them."""
    import yaml

    spec = gallery.sample.spec
    text = yaml.safe_dump(_plain(spec.raw), sort_keys=False, allow_unicode=True, default_flow_style=None, width=100)
    yield f'<section id="spec"><h2>The spec</h2><pre>{escaped(short(text.rstrip(), MOST_TEXT))}</pre></section>'
    yield '<section id="record"><h2>Where this is from</h2><dl>'
    yield from (f"<dt>{escaped(name)}</dt><dd>{escaped(value)}</dd>" for name, value in gallery.record)
    yield f"<dt>pictures show</dt><dd>{escaped(gallery.sample.says)}</dd></dl></section>"


def _plain(value: Any) -> Any:
    """Only what YAML has letters for."""
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    return value if isinstance(value, str | int | float | bool) or value is None else str(value)


def _equations(spec: Any, names: Sequence[str]) -> dict[str, str]:
    """The equations of each series by its name; before those of the first one stands what belongs to none alone."""
    from procgen.report.equations import equations

    found: dict[str, str] = {}
    common: list[str] = []
    for paragraph in "\n".join(equations(spec, WIDTH)).strip("\n").split("\n\n"):
        owner = paragraph.partition("[t] = ")[0]
        if owner in spec.series:
            found[owner] = paragraph
        else:
            common.append(paragraph)
    return {**found, names[0]: "\n\n".join([*common, found.get(names[0], "")]).strip("\n")}
