"""All charts of a sample and its theory, series by series, and what is to be said beside them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from procgen.report.pictures import between, fans, laws, memory, seasons
from procgen.report.pictures.chart import Chart
from procgen.report.pictures.sample import Sample, of_ensemble, of_origin, of_spec
from procgen.report.pictures.subject import Subject, subjects

if TYPE_CHECKING:
    from procgen.checks.verdict import Verdict


@dataclass(frozen=True)
class Section:
    """One series with its charts."""

    subject: Subject
    charts: tuple[Chart, ...]


@dataclass(frozen=True)
class Gallery:
    """What is stated and seen of every series, and of what they share.

    `record` says what the values are: pairs of a name and its value, such as digests and versions.
    """

    sample: Sample
    theory: Any
    sections: tuple[Section, ...]
    shared: tuple[Chart, ...]
    record: tuple[tuple[str, str], ...]

    @property
    def title(self) -> str:
        names = list(self.sample.spec.series)
        more = f" and {len(names) - 4} more series" if len(names) > 4 else ""
        return self.sample.spec.title or ", ".join(names[:4]) + more

    @property
    def groups(self) -> list[tuple[str, Sequence[Chart]]]:
        """Heading and charts, for what knows no more than that."""
        found: list[tuple[str, Sequence[Chart]]] = [(s.subject.called, s.charts) for s in self.sections]
        return found + ([(self.heading, self.shared)] if self.shared else [])

    @property
    def heading(self) -> str:
        """What the charts that are of no series alone show."""
        parts = any(chart.title == fans.PARTS for chart in self.shared)
        kinds = ["between series"] * (len(self.shared) > parts) + ["within a path"] * parts
        return " and ".join(kinds).capitalize()


def of_verdict(verdict: Verdict) -> Gallery | None:
    """The pictures of what a verdict has judged; None where it does not know its data."""
    if verdict.origin is None:
        return None
    departing = [row.series for row in verdict.rows if row.outcome == "departs"]
    sample = of_origin(verdict.origin, [name for names in departing for name in names.split(" ~ ")])
    pairs = [tuple(names.split(" ~ ")) for names in departing if " ~ " in names]
    ensemble = getattr(verdict.origin, "ensemble", None)
    record = _record_of_table(verdict.origin) if ensemble is None else _record_of_data(ensemble, sample.spec)
    return _gallery(sample, record, [(a, b) for a, b, *_ in pairs])


def of_spec_alone(spec: Any) -> Gallery:
    """The pictures of a spec, with a few paths drawn for them."""
    return _gallery(of_spec(spec), _record(spec))


def of_data(ensemble: Any) -> Gallery:
    """The pictures of an ensemble."""
    return _gallery(of_ensemble(ensemble), _record_of_data(ensemble, ensemble.spec))


def _gallery(sample: Sample, record: Sequence[tuple[str, str]], suspects: Sequence[tuple[str, str]] = ()) -> Gallery:
    from procgen.theory import theory

    known = theory(sample.spec)
    every = subjects(sample, known)
    sections = tuple(Section(subject, tuple(_charts(subject))) for subject in every)
    shared = list(between.between(every, known, suspects))
    parts = fans.strips(sample)
    if parts is not None:
        shared.append(parts)
    return Gallery(sample, known, sections, tuple(shared), tuple(record))


def _charts(subject: Subject) -> Iterator[Chart]:
    yield from fans.fans(subject)
    yield from seasons.seasons(subject)
    for draw in (memory.autocorrelations, memory.squares, laws.variance, laws.density, laws.quantile_plot):
        chart = draw(subject)
        if chart is not None:
            yield chart


def _record(spec: Any) -> list[tuple[str, str]]:
    from procgen.chance.streams import STREAM_VERSION

    return [("seed", str(spec.seed)), ("stream version", str(STREAM_VERSION)), *_record_of_any(spec)]


def _record_of_any(spec: Any) -> list[tuple[str, str]]:
    from procgen.ensemble.manifest import versions

    return [("SHA-256 of the spec", spec.digest()), ("pictures made by", _listed(versions()))]


def _record_of_table(table: Any) -> list[tuple[str, str]]:
    """Of anyone's table: its values come from no seed of ours; what was in memory has no bytes to tell it by."""
    if table.file_digest is None:
        return _record_of_any(table.spec)
    return [("file", table.where), ("SHA-256 of the file", table.file_digest), *_record_of_any(table.spec)]


def _record_of_data(ensemble: Any, spec: Any) -> list[tuple[str, str]]:
    """Of an ensemble of ours: its seed is that of the spec it was drawn from, whichever it is held against."""
    out = _record(ensemble.spec)
    manifest = getattr(ensemble, "manifest", None)
    if spec.digest() != ensemble.spec.digest():
        out[0] = ("seed", f"{ensemble.spec.seed}, of the spec that the values were drawn from, which is another")
        out[2:3] = [
            ("SHA-256 of the spec that they are held against", spec.digest()),
            ("SHA-256 of the spec that they were drawn from", ensemble.spec.digest()),
        ]
    if manifest is not None:
        out.insert(0, ("ensemble", str(ensemble.path)))
        out.append(("SHA-256 of the values", manifest.digest))
        out.append(("values made by", _listed(manifest.versions)))
        if not manifest.portable:
            out.append(("not the same bits on every machine", manifest.why_not_portable))
    return out


def _listed(versions: Mapping[str, str]) -> str:
    return ", ".join(f"{name} {version}" for name, version in versions.items())
