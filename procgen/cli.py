"""The command line: parse, call, print. What is heavy is imported by the command that uses it."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

from procgen.console import guarded, printed, progress, run, said
from procgen.declared import Argument, Option, command, fault
from procgen.difference_command import HELP, difference
from procgen.ensemble.own import leave, load_functions
from procgen.export_command import EXAMPLES, Columns, export
from procgen.options import (
    Expect,
    Settings,
    Start,
    Variant,
    VariantOrAll,
    as_expected,
    asked,
    expected,
    named,
    one_asked,
    refuse_any,
    share,
    steps_of,
    told_unnamed,
    whole,
    within,
)

SpecFile = Annotated[Path, Argument(metavar="SPEC", help="The spec, a YAML file.", show_default=False)]
Scheduler = Annotated[
    str | None,
    Option(metavar="local|ADDRESS", help="Work on a Dask cluster: the one there, or one started here."),
]
Overwrite = Annotated[
    bool, Option("--overwrite", help="Replace a FILE that procgen did not write; its own it replaces.")
]
Json = Annotated[bool, Option("--json", help="Print JSON instead of text.")]


def numbers_of(text: str) -> tuple[float, ...]:
    """Frequencies from `0,0.1,0.5`."""
    try:
        numbers = tuple(float(part) for part in text.split(","))
    except ValueError:
        numbers = ()
    if not numbers or not all(0.0 <= f <= 0.5 for f in numbers):
        raise fault(f"expected frequencies in cycles a step, from 0 to 0.5, such as 0,0.1, got {text!r}")
    return numbers


def horizons_of(text: str) -> tuple[int, ...]:
    """Steps ahead from `1,10,100`."""
    parts = [part.strip() for part in text.split(",")]
    if not all(part.isdecimal() and len(part) <= 7 and 1 <= int(part) <= 1_000_000 for part in parts):
        raise fault(f"expected steps ahead from 1 to 1,000,000, such as 1,10,100, got {text!r}")
    return tuple(int(part) for part in parts)


def column_of(text: str) -> tuple[str, str]:
    """Series and column from `load_kw=load`."""
    series, given, column = text.partition("=")
    if not (series and given and column):
        raise fault(f"expected SERIES=NAME such as load_kw=load, got {text!r}", where="--series-col")
    return series, column


@command(
    short_help="Draw paths of a spec.",
    epilog="\b\nExamples:\n  procgen render specs/pump-flow.yaml -o build/pump-flow --paths 5000\n"
    "  procgen render specs/cold-store.yaml --variant all -o build/cold-store",
)
@guarded
def render(
    spec: SpecFile,
    out: Annotated[str, Option("-o", "--out", metavar="OUT", help="Folder to write, or a URL.", show_default=False)],
    paths: Annotated[
        int | None, Option(parser=whole(1), metavar="N", help="Number of paths, instead of the spec's.")
    ] = None,
    first_path: Annotated[int, Option(parser=whole(0), metavar="N", help="Number of the first path.")] = 0,
    steps: Annotated[
        int | None, Option(parser=whole(1), metavar="N", help="Number of steps, instead of the spec's.")
    ] = None,
    seed: Annotated[int | None, Option(parser=whole(0), metavar="N", help="Seed, instead of the spec's.")] = None,
    start: Start = None,
    variant: VariantOrAll = None,
    setting: Settings = None,
    workers: Annotated[
        int | None, Option(parser=whole(1), metavar="N", help="Processes; what the size repays when absent.")
    ] = None,
    layout: Annotated[
        str,
        Option(
            metavar="long|panel|wide|nested",
            help="A row of a file is a path and step, an observation, a step, or a path.",
        ),
    ] = "long",
    columns: Columns = None,
    partition: Annotated[
        str | None,
        Option(metavar="series|paths", help="What a file holds: one series, or all series of some paths."),
    ] = None,
    reveal: Annotated[
        str | None,
        Option(metavar="all|NAME,…", help="Terms and hidden outputs to write beside the series."),
    ] = None,
    resume: Annotated[bool, Option("--resume", help="Go on with a render that was stopped, or mend one.")] = False,
    overwrite: Annotated[bool, Option("--overwrite", help="Remove the ensemble that is in OUT first.")] = False,
    scheduler: Scheduler = None,
    expect: Expect = None,
) -> None:
    """Draw paths of SPEC into the folder OUT: Parquet parts and manifest.json.

    Ends with exit code 1 when the digest is not the one expected; the files are kept.
    """
    import procgen as pg
    from procgen.report.rendered import rendered

    specs = asked(spec, variant, setting, start, {"paths": paths, "steps": steps, "seed": seed})
    if variant == "all" and len(specs) == 1:
        said(f"the spec has no variants; {within(out, 'base')} has it as written, and there is nothing beside it")
    wanted = None if expect is None else expected(expect, specs)
    size: dict[str, Any] = {"paths": paths, "first_path": first_path, "steps": steps, "seed": seed}
    form: dict[str, Any] = {"layout": layout, "columns": columns, "partition": partition, "reveal": reveal}
    if not overwrite:
        refuse_any(specs, out, resume=resume, **size, **form)
    told_unnamed(reveal, specs)
    for name, loaded in specs.items():
        folder = within(out, name)
        with progress(f"drawing {name}".strip()) as tick, named(name):
            pg.render(
                loaded,
                folder,
                workers=workers,
                resume=resume,
                overwrite=overwrite,
                scheduler=scheduler,
                progress=tick,
                **size,
                **form,
            )
        printed(rendered(pg.open_ensemble(folder)))
    if len(specs) > 1:
        last = within(out, [*specs][-1])
        printed(f"all have the same shocks: procgen difference {within(out, 'base')} {last} tells what differs")
    if wanted is not None:
        raise SystemExit(as_expected(out, wanted))


command("export", short_help="Write an ensemble as one file for another tool.", epilog=EXAMPLES)(export)


@command(
    short_help="Compare paths with the theory of their spec.",
    epilog="\b\nExamples:\n  procgen validate build/pump-flow\n"
    "  procgen validate mine.csv --spec specs/pump-flow.yaml --path-col run --step-col hour\n"
    "  procgen validate mine.csv --spec specs/pump-flow.yaml --path-col run --time-col at --series-col flow=litres",
)
@guarded
def validate(
    data: Annotated[
        str,
        Argument(metavar="OUT|DATA", help="An ensemble, or a Parquet or CSV file.", show_default=False),
    ],
    spec: Annotated[Path | None, Option(metavar="SPEC", help="The spec that DATA should follow.")] = None,
    path_col: Annotated[str | None, Option(metavar="NAME", help="Column of DATA with the path.")] = None,
    step_col: Annotated[str | None, Option(metavar="NAME", help="Column of DATA with the step.")] = None,
    time_col: Annotated[str | None, Option(metavar="NAME", help="Column of DATA with the time instead.")] = None,
    series_col: Annotated[
        list[str] | None,
        Option(metavar="SERIES=NAME", help="Column of DATA with a series, or its id; may be given again."),
    ] = None,
    id_col: Annotated[str | None, Option(metavar="NAME", help="Column of DATA that says whose its value is.")] = None,
    value_col: Annotated[str | None, Option(metavar="NAME", help="Column of DATA with that value.")] = None,
    false_alarm: Annotated[
        float, Option(parser=share(1e-12, 0.5), metavar="P", help="Chance of a false alarm over all checks.")
    ] = 0.001,
    workers: Annotated[
        int | None, Option(parser=whole(1), metavar="N", help="Processes; what the size repays when absent.")
    ] = None,
    scheduler: Scheduler = None,
    json: Json = False,
    in_full: Annotated[
        bool, Option("--in-full", help="Agreement in part is not enough: end with 2 where a side was not judged.")
    ] = False,
    report: Annotated[Path | None, Option(metavar="FILE.html", help="Also write an HTML report.")] = None,
    overwrite: Overwrite = False,
) -> None:
    """Compare paths with the theory of their spec.

    DATA has a row a path and step and a column a series (layout long), a row an observation with its id and value
    (panel), or, for one series, a row a step and a column a path such as path_0 (wide).

    Ends with exit code 0 when they agree, 1 when they depart, 2 when it cannot be judged.
    """
    load_functions()
    import procgen as pg
    from procgen.report.pictures.write import page_place
    from procgen.report.rendered import verdict_json

    if report is not None:
        page_place(report, overwrite)
    roles = {"path": path_col, "step": step_col, "time": time_col, "id": id_col, "value": value_col}
    columns = {role: name for role, name in roles.items() if name is not None} | dict(map(column_of, series_col or ()))
    stated = None if spec is None else pg.load(spec)
    with progress("reading") as tick:
        verdict = pg.validate(data, stated, false_alarm, columns or None, tick, workers, scheduler)
    written = None if report is None else f"report: {verdict.to_html(report, overwrite)}"
    printed(verdict_json(verdict) if json else verdict.text(), json)
    if written:
        said(written) if json else printed(f"\n{written}")
    lacking = in_full and verdict.agrees is True and not verdict.complete
    raise SystemExit(2 if lacking else {True: 0, False: 1, None: 2}[verdict.agrees])


@command(
    short_help="Draw what a spec states, and what paths show.",
    epilog="\b\nExamples:\n  procgen picture specs/pump-flow.yaml -o pump-flow.html\n"
    "  procgen picture build/pump-flow -o pump-flow.svg",
)
@guarded
def picture(
    source: Annotated[str, Argument(metavar="SPEC|OUT", help="A spec, or a rendered ensemble.", show_default=False)],
    out: Annotated[
        Path,
        Option(
            "-o",
            "--out",
            metavar="FILE",
            help="File to write: .html (a page), .svg, or .png (needs the extra plots).",
            show_default=False,
        ),
    ],
    overwrite: Overwrite = False,
    start: Start = None,
    variant: Variant = None,
    setting: Settings = None,
) -> None:
    """Draw SPEC, with a few paths of it, or the ensemble OUT: fans, correlograms, variances, densities, quantiles.

    A page needs nothing but a browser; that of an ensemble has its verdict too.
    """
    from procgen.ensemble.places import place_of
    from procgen.report.pictures.draw import picture as draw

    other = variant is not None or setting or start is not None
    if other and place_of(source).is_dir():
        raise fault("an ensemble is drawn as it is; give a spec with --variant, --set and --start")
    with progress("reading") as tick:
        what = one_asked(Path(source), variant, setting, start) if other else source
        printed(f"picture: {draw(what, out, tick, overwrite)}")


@command(
    short_help="Print what a spec implies.",
    epilog="\b\nExample:\n  procgen theory specs/pump-flow.yaml --at 0,1,24 --lags 5",
)
@guarded
def theory(
    spec: SpecFile,
    json: Json = False,
    at: Annotated[
        tuple | None,
        Option(parser=steps_of, metavar="0,1,10", help="Steps at which to give mean and variance."),
    ] = None,
    lags: Annotated[
        int, Option(parser=whole(0, 100_000), metavar="N", help="Largest lag of the autocovariances.")
    ] = 40,
    frequencies: Annotated[
        tuple | None,
        Option(parser=numbers_of, metavar="0,0.1", help="Frequencies, in cycles a step, of spectral densities."),
    ] = None,
    horizon: Annotated[
        tuple | None,
        Option(parser=horizons_of, metavar="1,10,100", help="Steps ahead for the variances of forecast errors."),
    ] = None,
    start: Start = None,
    variant: Variant = None,
    setting: Settings = None,
) -> None:
    """Print what SPEC implies: equations, stationarity, moments, memory, and how far it can be forecast."""
    load_functions()
    import procgen as pg
    from procgen.report.theory import theory_json, theory_text

    loaded = one_asked(spec, variant, setting, start)
    printed((theory_json if json else theory_text)(loaded, pg.theory(loaded), at, lags, frequencies, horizon), json)


@command(
    short_help="List the terms a spec can use, or explain one.",
    epilog="\b\nExamples:\n  procgen terms\n  procgen terms linear\n  procgen terms garch",
)
@guarded
def terms(
    kind: Annotated[
        str | None, Argument(metavar="[KIND]", help="A term, a law, or a family of terms.", show_default=False)
    ] = None,
) -> None:
    """List the terms a spec can use, or say what is known of one: parameters, example, theory, source."""
    from procgen.report import catalogue

    printed(catalogue.screen() if kind is None else catalogue.page(kind))


@command(
    short_help="Print the JSON Schema of the spec language, for editors.",
    epilog="\b\nExample:\n  procgen schema > procgen.schema.json",
)
@guarded
def schema() -> None:
    """Print the spec language as a JSON Schema (2020-12), with which an editor completes and checks while one types.

    The reader of the other commands has the last word: it knows the rules that join parameters, names and steps.
    """
    from json import dumps

    from procgen.report.schema import schema as spec_schema

    printed(dumps(spec_schema(), indent=1, ensure_ascii=False), json=True)


@command(
    short_help="Compare values with the digests in their manifest.",
    epilog="\b\nExamples:\n  procgen digest build/pump-flow\n  procgen digest build/pump-flow --redraw",
)
@guarded
def digest(
    out: Annotated[str, Argument(metavar="OUT", help="A rendered ensemble.", show_default=False)],
    expect: Expect = None,
    redraw: Annotated[bool, Option("--redraw", help="Also draw some paths again; name the first difference.")] = False,
) -> None:
    """Compare the values in OUT with the digests in its manifest, and print the digest.

    Ends with exit code 0 when they agree, 1 when they differ, 2 when OUT cannot be read.
    """
    from procgen.ensemble import check_digest

    with progress("reading") as tick:
        result = check_digest(out, expect=expect, redraw=redraw, progress=tick)
    printed(result.text())
    raise SystemExit(0 if result.ok else 1)


command("difference", **HELP)(difference)


def main() -> None:
    """Run the command line of this process, and end it."""
    try:
        run()
    except SystemExit as ended:
        if ended.code is None or isinstance(ended.code, int):
            leave(ended.code or 0)
        raise
