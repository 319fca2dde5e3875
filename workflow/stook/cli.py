"""The command line ``stook``."""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console

from stook.errors import StookError

app = typer.Typer(
    help="Crop-climate assessments, from raw climate grids to a report.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
)
OUT = Console(highlight=False, soft_wrap=True)
ERR = Console(stderr=True, highlight=False, soft_wrap=True)

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
    from stook.assessment.load import load_assessment
    from stook.engine import run as engine
    from stook.engine.plan import Plan
    from stook.engine.start import start

    request = engine.Request(
        file, tuple(set_ or ()), tuple(region or ()), until, cores or available_cores()
    )
    plan = Plan(load_assessment(file, request.overrides, request.regions))
    plan.targets(until)
    if dry_run:
        for job in engine.dry_run(plan, request):
            OUT.print(f"{job.rule} {job.wildcards}: {job.reason}")
        return
    engine.prepare_folder(plan.root)
    start(plan, {"checked": True})
    count = engine.run(plan, request, OUT)
    OUT.print("everything is up to date" if count == 0 else f"{count} jobs done")


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
