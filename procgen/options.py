"""Options that several commands have: which spec of a file is meant, and which values stand in it."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

from procgen.console import printed, progress, said
from procgen.declared import Option, fault

if TYPE_CHECKING:
    from procgen.ensemble.expected import Expected
    from procgen.spec.model import Spec
    from procgen.spec.variants import Setting

Variant = Annotated[
    str | None,
    Option(metavar="NAME", help="A variant that the spec has, instead of the spec as written."),
]
VariantOrAll = Annotated[
    str | None,
    Option(
        metavar="NAME|all",
        help="A variant that the spec has; all: the spec as written in OUT/base, and each variant in OUT/NAME.",
    ),
]
Settings = Annotated[
    list[str] | None,
    Option(
        "--set",
        metavar="PLACE=VALUE",
        help="What is to stand at a place, such as series.load.ar.sd=9 or time.steps=500; may be given again.",
    ),
]
Start = Annotated[str | None, Option("--start", metavar="DATE", help="Date and time of step 0, instead of the spec's.")]
Expect = Annotated[
    str | None,
    Option(
        metavar="HEX|MANIFEST",
        help="The digest it should have, or an old manifest.json (or its folder), which also tells what moved.",
    ),
]


def whole(least: int, most: int | None = None) -> Callable[[str], int]:
    """A reader of whole numbers from `least` on, up to `most` where there is one."""
    span = f"of at least {least}" if most is None else f"from {least} to {most:,}"

    def read(text: str | int) -> int:
        digits = str(text).strip()
        number = int(digits) if digits.removeprefix("-").isdecimal() and len(digits) <= 400 else None
        if number is None or number < least or (most is not None and number > most):
            raise fault(f"expected a whole number {span}, in digits, got {text!r}")
        return number

    return read


def share(least: float, most: float) -> Callable[[str], float]:
    """A reader of numbers between two."""

    def read(text: str | float) -> float:
        try:
            number = float(text)
        except ValueError:
            number = float("nan")
        if not least <= number <= most:
            raise fault(f"expected a number from {least:g} to {most:g}, got {text!r}")
        return number

    return read


PLACES = {"paths": "paths", "steps": "time.steps", "seed": "seed"}  # options of their own, and where they stand


def asked(
    file: Path,
    variant: str | None,
    settings: list[str] | None = None,
    start: str | None = None,
    changed: Mapping[str, int | None] | None = None,
) -> dict[str, Spec]:
    """The specs meant by the options, by the name of their folder: "" alone, or base and every variant for "all".

    `changed`: what options of their own say of paths, steps and seed, which `settings` must not say too. SpecError
    lists every fault.
    """
    import procgen as pg
    from procgen.spec.reader import settled
    from procgen.spec.variants import ALL, BASE, all_settings, setting_of

    spec = pg.load(file)
    given = all_settings(settings or ())
    _refuse_twice(given, changed or {})
    if start is not None:
        given = (*given, setting_of(f"time.start={start}", "--start"))
    names = {BASE: BASE, **{name: name for name in spec.variants}} if variant == ALL else {"": variant or BASE}
    specs = {folder: spec.variant(name) for folder, name in names.items()}
    return {folder: settled(one, given) for folder, one in specs.items()} if given else specs


def _refuse_twice(given: Iterable[Setting], changed: Mapping[str, int | None]) -> None:
    from procgen.spec.model import Fault, SpecError

    options = {PLACES[name]: f"--{name}" for name, value in changed.items() if value is not None}
    twice = [one for one in given if one.place in options]
    if twice:
        message = "{} is set twice, also by {}; keep one of them"
        raise SpecError(tuple([Fault(one.spot, message.format(one.place, options[one.place])) for one in twice]))


def one_asked(file: Path, variant: str | None, settings: list[str] | None, start: str | None) -> Spec:
    """The one spec meant by the options; a variant called "all" is none. SpecError lists every fault."""
    import procgen as pg
    from procgen.spec.variants import ALL

    return pg.load(file).variant(ALL) if variant == ALL else asked(file, variant, settings, start)[""]


def within(out: str, name: str) -> str:
    """The folder of one of several ensembles; OUT itself where there is no name."""
    return os.path.join(out, name) if name and out else out


def refuse_any(specs: Mapping[str, Spec], out: str, **options: Any) -> None:
    """Of several specs, refuse what is in the way of any before the first is drawn. EnsembleError lists them all."""
    from procgen.ensemble.errors import EnsembleError
    from procgen.ensemble.job import refuse

    faults = []
    for name, spec in specs.items() if len(specs) > 1 else ():
        try:
            refuse(spec, within(out, name), **options)
        except EnsembleError as error:
            faults.append(str(error))
    if faults:
        raise EnsembleError("\n".join(["nothing is drawn, for not all variants can be:", *faults]))


def told_unnamed(reveal: str | None, specs: Mapping[str, Spec]) -> None:
    """Say of which series not all can be revealed, where all is asked for."""
    from procgen.ensemble.source import unnamed

    if reveal == "all":
        owners = dict.fromkeys(name for spec in specs.values() for name in unnamed(spec))
        if owners:
            said(
                f"not all terms of {', '.join(owners)} are revealed: several of one kind have no label; write as: "
                "some_name beside each"
            )


@contextmanager
def named(variant: str) -> Iterator[None]:
    """Errors of an ensemble say of which variant they are, where there are several."""
    from procgen.ensemble.errors import EnsembleError

    try:
        yield
    except EnsembleError as error:
        if not variant:
            raise
        raise EnsembleError(f"variant {variant}: {error}") from None


def expected(given: str, specs: dict[str, Spec]) -> Expected:
    """What one ensemble is expected to be, read before anything is drawn."""
    from procgen.ensemble.expected import expected as read

    if len(specs) > 1:
        raise fault("one digest is that of one ensemble; leave out --variant all", where="--expect")
    return read(given)


def as_expected(out: str, wanted: Expected) -> int:
    """Print whether the ensemble in OUT is the one that was expected; the exit code."""
    import procgen as pg
    from procgen.ensemble.expected import departure

    with progress("comparing") as tick:
        text = departure(pg.open_ensemble(out), wanted, tick)
    printed(text or "as expected")
    return 1 if text else 0


def steps_of(text: str) -> tuple[int, ...]:
    """Steps from `0,1,10`."""
    parts = [part.strip() for part in text.split(",")]
    if not all(part.isdecimal() and len(part) <= 12 for part in parts):
        raise fault(f"expected steps from 0 on, such as 0,1,10, got {text!r}")
    return tuple(int(part) for part in parts)
