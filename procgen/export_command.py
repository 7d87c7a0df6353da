"""The command `export`: an ensemble as one file for another tool."""

from __future__ import annotations

from typing import Annotated

from procgen.console import guarded, printed, progress
from procgen.declared import Argument, Option, fault
from procgen.options import whole

EXAMPLES = (
    "\b\nExamples:\n  procgen export build/pump-flow -o flow.csv --paths 0-9\n"
    "  procgen export build/pump-flow -o flow.xlsx --layout panel --local-time --decimals 1\n"
    "  procgen export build/pump-flow -o flow.npy --series flow"
)


def roles_of(text: str) -> dict[str, str]:
    """Roles of columns and their names from `id=shop,time=week`."""
    pairs = [part.partition("=") for part in text.split(",")]
    if not all(role.strip() and name.strip() for role, _, name in pairs):
        raise fault(f"expected ROLE=NAME, such as id=shop,time=week, got {text!r}")
    roles = [role.strip() for role, _, _ in pairs]
    twice = [role for role in roles if roles.count(role) > 1]
    if twice:
        raise fault(f"expected one name for {twice[0]}, got {roles.count(twice[0])}; keep one of them")
    return {role.strip(): name.strip() for role, _, name in pairs}


def numbers_of(text: str) -> range:
    """Numbers of paths or steps from `0-99`, both included, or `7`."""
    first, _, last = (part.strip() for part in text.partition("-"))
    last = last if "-" in text else first
    if not (first.isdecimal() and last.isdecimal() and max(len(first), len(last)) <= 15 and int(first) <= int(last)):
        raise fault(f"expected numbers from 0 on, the smaller first, such as 0-99 or 7, got {text!r}")
    return range(int(first), int(last) + 1)


Columns = Annotated[
    dict | None,
    Option(parser=roles_of, metavar="id=NAME,…", help="Other names for id, path, step, time and value."),
]


@guarded
def export(
    source: Annotated[str, Argument(metavar="OUT", help="A rendered ensemble.", show_default=False)],
    out: Annotated[
        str,
        Option(
            "-o",
            "--out",
            metavar="FILE",
            help="File to write: .csv, .xlsx (needs the extra sheets), .parquet or .npy.",
            show_default=False,
        ),
    ],
    layout: Annotated[
        str | None,
        Option(
            metavar="long|panel|wide|nested",
            help="A row is a path and step (when absent), an observation, a step, or a path.",
        ),
    ] = None,
    series: Annotated[str | None, Option(metavar="NAME,…", help="Series, in this order; all when absent.")] = None,
    paths: Annotated[
        range | None,
        Option(parser=numbers_of, metavar="0-99", help="Paths by number, both included; all when absent."),
    ] = None,
    steps: Annotated[
        range | None,
        Option(parser=numbers_of, metavar="0-95", help="Steps by number, both included; all when absent."),
    ] = None,
    decimals: Annotated[
        int | None, Option(parser=whole(-22, 22), metavar="N", help="Round to so many; as stored when absent.")
    ] = None,
    local_time: Annotated[
        bool, Option("--local-time", help="Times by the clock of the spec's zone, in place of UTC.")
    ] = False,
    columns: Columns = None,
    overwrite: Annotated[bool, Option("--overwrite", help="Replace a file that is there.")] = False,
) -> None:
    """Write the ensemble OUT, or some of it, as one file for another tool.

    What the file cannot hold is said before it is written; the file appears when it is whole. Values are not checked
    on the way: `procgen digest OUT` tells whether they are those that were drawn.
    """
    import procgen as pg
    from procgen.ensemble.export import export as planned

    ready = planned(
        pg.open_ensemble(source),
        out,
        layout=layout,
        series=None if series is None else [name.strip() for name in series.split(",")],
        paths=paths,
        steps=steps,
        decimals=decimals,
        local_time=local_time,
        columns=columns,
        overwrite=overwrite,
    )
    printed(ready.text())
    with progress("writing") as tick:
        ready.write(overwrite, tick)
    printed(f"written, {ready.size_text()}")
