"""The command line ``stook``."""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer
from rich.console import Console

from stook.errors import AssessmentError, StookError

if TYPE_CHECKING:
    from stook.assessment.check import Check
    from stook.assessment.schema import Assessment
    from stook.engine.run import Request

app = typer.Typer(
    help="Crop-climate assessments, from raw climate grids to a report.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
)
OUT = Console(highlight=False, soft_wrap=True)
ERR = Console(stderr=True, highlight=False, soft_wrap=True)
TABLE_WIDTH = 160
"""Columns of a table that is not printed to a terminal."""

WARNINGS_SHOWN = 10
"""Warnings that `run` prints; `check` prints all, and the report lists all."""

File = Annotated[Path, typer.Argument(metavar="FILE", help="The assessment file.")]
Cores = Annotated[
    int | None, typer.Option("--cores", "-c", min=1, help="Cores to use. [default: all]")
]
Set = Annotated[
    list[str] | None,
    typer.Option("--set", metavar="KEY=VALUE", help="Override a key of the file; repeatable."),
]
Region = Annotated[
    list[str] | None,
    typer.Option("--region", metavar="NAME", help="Compute this region only; repeatable."),
]


@app.command()
def demo(
    folder: Annotated[
        Path, typer.Argument(metavar="[FOLDER]", help="Where to write the world and its results.")
    ] = Path("hollin"),
    size: Annotated[str, typer.Option(help="tiny (seconds) or demo (minutes).")] = "demo",
    seed: Annotated[int | None, typer.Option(min=0, help="Seed of the world.")] = None,
    pixels: Annotated[int | None, typer.Option(min=1, help="About how many pixels.")] = None,
    years: Annotated[int | None, typer.Option(min=1, help="Years of the simulations.")] = None,
    cores: Cores = None,
) -> None:
    """Generate an invented world and run its whole assessment to a report.

    The same command again goes on where it was stopped.
    """
    from stook.demo import generate_world

    file = generate_world(folder, size, seed, pixels, years, OUT)
    _run(file, cores=cores)


@app.command()
def new(
    folder: Annotated[
        Path, typer.Argument(metavar="FOLDER", help="Folder that holds the climate files.")
    ],
) -> None:
    """Look at the files of a folder and write a commented first assessment file there."""
    from stook.assessment.new import write_first_assessment

    path, seen = write_first_assessment(folder)
    for line in seen:
        OUT.print(line, markup=False)
    OUT.print(f"wrote {path}", markup=False)
    OUT.print(
        f"fill in what is marked FILL IN, then: stook check {path}", markup=False, style="bold"
    )


@app.command()
def check(file: File, region: Region = None, set_: Set = None) -> None:
    """Open every input, list what was found, and report all problems at once."""
    from stook.assessment.listing import print_problems, series_table, system_table, verdict
    from stook.assessment.load import load_assessment

    found = _look(load_assessment(file, set_ or (), region or ()))
    wide = OUT if OUT.is_terminal else Console(width=TABLE_WIDTH, highlight=False)
    for table in (series_table(found), system_table(found)):
        if table.row_count:
            wide.print(table)
            wide.print()
    print_problems(OUT, found.problems)
    OUT.print(verdict(found), markup=False)
    if found.errors:
        raise typer.Exit(1)


@app.command()
def run(
    file: File,
    cores: Cores = None,
    region: Region = None,
    until: Annotated[
        str, typer.Option("--until", metavar="STAGE", help="Last stage to run.")
    ] = "report",
    set_: Set = None,
    dry_run: Annotated[
        bool, typer.Option("--dry-run", "-n", help="Say what would run and why; write nothing.")
    ] = False,
) -> None:
    """Check an assessment and run it; only what is not up to date is computed."""
    _run(file, set_ or (), region or (), until, cores, dry_run)


@app.command()
def fit(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="The fit document.")],
) -> None:
    """Estimate a yield response from a yield panel and the observed season indices."""
    from stook.fit.job import run_fit
    from stook.fit.show import show_fit

    with ERR.status("fitting"):
        found = run_fit(file)
    show_fit(found, OUT if OUT.is_terminal else Console(width=TABLE_WIDTH, highlight=False))


@app.command()
def verify(
    results: Annotated[Path, typer.Argument(metavar="RESULTS", help="The results folder.")],
) -> None:
    """Compare every file of a results folder, and every raw input, with the ledger."""
    from stook.audit.verify import verify as compare

    findings = compare(results)
    for finding in findings:
        OUT.print(str(finding), markup=False)
    if findings:
        raise typer.Exit(1)
    OUT.print("every file is as recorded")


@app.command()
def compare(
    a: Annotated[Path, typer.Argument(metavar="A", help="A results folder.")],
    b: Annotated[Path, typer.Argument(metavar="B", help="Another results folder.")],
    csv: Annotated[
        Path | None,
        typer.Option("--csv", metavar="FOLDER", help="Write every table here as CSV."),
    ] = None,
    json: Annotated[
        bool, typer.Option("--json", help="Print one JSON object instead of tables.")
    ] = False,
    stage: Annotated[
        list[str] | None,
        typer.Option("--stage", metavar="STAGE", help="Read files of this stage only; repeatable."),
    ] = None,
) -> None:
    """Say what differs between two runs: settings, inputs, regions, pixels, files.

    Exit status 0 if all values are identical, 3 if some differ.
    """
    from stook.audit.compare_output import compare_folders

    wide = OUT if OUT.is_terminal or json else Console(width=TABLE_WIDTH, highlight=False)
    if status := compare_folders(a, b, wide, ERR, stage or (), csv, as_text=not json):
        raise typer.Exit(status)


def _run(
    file: Path,
    overrides: list[str] | tuple[str, ...] = (),
    regions: list[str] | tuple[str, ...] = (),
    until: str = "report",
    cores: int | None = None,
    dry_run: bool = False,
) -> None:
    from stook.assessment.layout import STAGES
    from stook.assessment.listing import print_problems
    from stook.assessment.load import load_assessment
    from stook.engine.run import Request

    if until not in STAGES:
        raise AssessmentError(f"--until: no stage {until}; the stages are {', '.join(STAGES)}")
    assessment = load_assessment(file, overrides, regions)
    found = _look(assessment)
    print_problems(ERR, found.errors or found.warnings, None if found.errors else WARNINGS_SHOWN)
    if found.errors:
        raise typer.Exit(1)
    request = Request(file, tuple(overrides), tuple(regions), until, cores or available_cores())
    (_plan_only if dry_run else _compute)(assessment, found, request)


def _look(assessment: Assessment) -> Check:
    """Check an assessment with a moving line."""
    from stook.assessment.check import check as examine

    with ERR.status("checking") as status:
        return examine(
            assessment, lambda done, all_, what: status.update(f"checking {done}/{all_} {what}")
        )


def _plan_only(assessment: Assessment, found: Check, request: Request) -> None:
    """Print what would run and why, and what it would take on disk."""
    from stook.engine.disk import estimate, free_space, size
    from stook.engine.explain import lines
    from stook.engine.plan import Plan
    from stook.engine.run import dry_run

    plan = Plan(assessment)
    planned = dry_run(plan, request)
    for line in lines(planned):
        OUT.print(f"{line.stage:<9} {line.name:<13} {line.count:>6}  {line.why}", markup=False)
    if not planned:
        OUT.print("everything is up to date")
        return
    needed = estimate(assessment, found, planned)
    OUT.print(
        f"{len(planned)} jobs would run and write about {size(needed)} to {plan.root} "
        f"({size(free_space(plan.root))} free)",
        markup=False,
    )


def _compute(assessment: Assessment, found: Check, request: Request) -> None:
    """Run the jobs, and say where the report is."""
    from stook.assessment.layout import Layout
    from stook.engine import run as engine
    from stook.engine.plan import Plan
    from stook.engine.start import start

    plan = Plan(assessment)
    start(plan, found.problems)
    count = engine.run(plan, request, OUT)
    jobs = f"{count} job{'s' if count != 1 else ''} done"
    OUT.print(jobs if count else "everything is up to date")
    if request.until == "report":
        OUT.print(f"report: {Layout.of(assessment).report_page}", markup=False)
    else:
        OUT.print(f"results: {plan.root}", markup=False)


def available_cores() -> int:
    """Return the cores this process may use."""
    return len(os.sched_getaffinity(0))


def main() -> None:
    """Run the command line; a user's mistake is one line and exit status 1."""
    try:
        app()
    except StookError as error:
        for line in str(error).splitlines():
            ERR.print("[bold red]error:[/] ", end="")
            ERR.print(line, markup=False)
        sys.exit(1)


if __name__ == "__main__":
    main()
