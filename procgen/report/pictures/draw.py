"""`procgen picture`: of a spec or of an ensemble, into a page, an SVG or a PNG."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from procgen.ensemble.places import Place, Remote, place_of
from procgen.report.pictures import gallery as galleries
from procgen.report.pictures.gallery import Gallery
from procgen.report.pictures.write import PictureError, place_for, sort_of, write
from procgen.spec.model import Spec

TABLES = (".csv", ".tsv", ".parquet", ".pq", ".gz")
Tick = Callable[[int, int], None]


def picture(source: str | Path | Spec, file: Path, progress: Tick | None = None, overwrite: bool = False) -> Path:
    """Draw a spec (a YAML file, or read already) or an ensemble (the place of a render) into `file`; returns its path.

    The suffix says what it becomes. A page of an ensemble has its verdict too, for which all of it is read; SVG and
    PNG show pictures only. A `file` that is there is replaced where procgen wrote it, any other one with `overwrite`.

    Raises PictureError, SpecError, EnsembleError.
    """
    sort = sort_of(place_for(file, overwrite))
    if isinstance(source, Spec):
        return write(file, _drawn(source, sort, progress), overwrite)
    place = place_of(source)
    if isinstance(place, Remote):
        if not place.is_dir():
            raise PictureError(f"there is no ensemble at {place}; give the URL of one, or a spec on this machine")
        return write(file, _drawn(place, sort, progress), overwrite)
    source = place
    if not source.exists():
        raise PictureError(f"there is no file or folder {source}; give a spec, or the folder of a render")
    if source.suffix.lower() in TABLES and source.is_file():
        raise PictureError(
            f"{source} is a table and does not say what it should follow; write: "
            f"procgen validate {source} --spec SPEC --report FILE.html"
        )
    return write(file, _drawn(source, sort, progress), overwrite)


def _drawn(source: Place | Spec, sort: str, progress: Tick | None) -> str | bytes:
    if sort == "html":
        return _page(source, progress)
    shown = _gallery(source)
    lines = [f"The pictures show {shown.sample.says}.", "Stated: blue. Seen: ink. What chance allows: grey."]
    if sort == "svg":
        from procgen.report.pictures.svg import poster

        return poster(shown.title, lines, shown.groups)
    from procgen.report.pictures.png import png

    return png(shown.title, lines, shown.groups)


def _gallery(source: Place | Spec) -> Gallery:
    if not isinstance(source, Spec) and source.is_dir():
        from procgen.ensemble import open_ensemble

        return galleries.of_data(open_ensemble(source))
    return galleries.of_spec_alone(_spec(source))


def _page(source: Place | Spec, progress: Tick | None) -> str:
    from procgen.report.html import verdict_page, whole_page

    if isinstance(source, Spec) or not source.is_dir():
        return whole_page(galleries.of_spec_alone(_spec(source)))
    from procgen.checks.validate import validate

    return verdict_page(validate(source.url if isinstance(source, Remote) else source, progress=progress))


def _spec(source: Place | Spec) -> Spec:
    from procgen.terms.given import spec_of

    return spec_of(source)
