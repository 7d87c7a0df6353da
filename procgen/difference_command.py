"""The command `difference`: two ensembles or specs side by side."""

from __future__ import annotations

from typing import Annotated, Any

from procgen.console import guarded, printed, progress
from procgen.declared import Argument, Option, fault
from procgen.options import steps_of

HELP: dict[str, Any] = {
    "short_help": "Say what differs between two ensembles or specs.",
    "epilog": "\b\nExamples:\n  procgen difference build/cold-store/base build/cold-store/heatwave --at 0,96,671\n"
    "  procgen difference specs/cold-store.yaml --variant heatwave\n"
    "  procgen difference old/manifest.json specs/cold-store.yaml",
}
WHAT = "A spec, the folder of an ensemble, or a manifest.json."


@guarded
def difference(
    a: Annotated[str, Argument(metavar="A", help=WHAT, show_default=False)],
    b: Annotated[str | None, Argument(metavar="B", help=f"{WHAT} Or --variant.", show_default=False)] = None,
    variant: Annotated[str | None, Option(metavar="NAME", help="This variant of the spec A, instead of B.")] = None,
    at: Annotated[
        tuple | None, Option(parser=steps_of, metavar="0,10,100", help="Steps of the paired figures.")
    ] = None,
    json: Annotated[bool, Option("--json", help="Print JSON instead of text.")] = False,
) -> None:
    """Say what differs between A and B: in meaning, by place; in values, by series; and by how much, path by path.

    Values are compared where both are ensembles. Of specs it is said which series would change, without drawing.
    Ends with exit code 0 when they are equal, 1 when they differ, 2 when one cannot be read.
    """
    import procgen as pg

    if (b is None) == (variant is None):
        raise fault("expected B, or --variant NAME of the spec A, one of them")
    first: Any = a if variant is None else pg.load(a)
    with progress("comparing") as tick:
        found = pg.difference(first, b if variant is None else first.variant(variant), at, tick)
    printed(found.to_json() if json else found.text(), json)
    raise SystemExit(0 if found.equal else 1)
