"""Running a plan with Snakemake in this process."""

from __future__ import annotations

import contextlib
import datetime
import os
import shutil
import signal
import threading
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import FrameType
from typing import Any, TextIO

import psutil
from rich.console import Console

import stook
from stook.engine import logger
from stook.engine.forkserver import forkserver
from stook.engine.lock import STATE, run_lock
from stook.engine.plan import Plan
from stook.engine.progress import Display, Failure, Planned, State, last_error, stage_of
from stook.engine.start import CHECKED, prepare_folder
from stook.errors import ResultsError, StookError

GRACE_SECONDS = 5.0
"""Time an interrupted job has to clean up before it is killed."""


@dataclass(frozen=True)
class Request:
    """What to run: the assessment file, its overrides and regions, and how far."""

    assessment: Path
    overrides: tuple[str, ...] = ()
    regions: tuple[str, ...] = ()
    until: str = "report"
    cores: int = 1

    @property
    def config(self) -> dict[str, Any]:
        """The Snakemake configuration that says the same."""
        given: dict[str, Any] = {"assessment": str(self.assessment.resolve()), CHECKED: True}
        given |= {"set": list(self.overrides)} if self.overrides else {}
        return given | ({"region": list(self.regions)} if self.regions else {})


class RunFailed(StookError):  # noqa: N818
    """Jobs failed; the message has a line for each."""


class Interrupted(StookError):  # noqa: N818
    """The run was interrupted by the user."""


def run(plan: Plan, request: Request, console: Console) -> int:
    """Run every job that is not up to date; return how many ran.

    Raises
    ------
    RunFailed
        If a job failed: stage, simulation, file, cause and log of each.
    Interrupted
        If the user pressed Ctrl-C; no half-written file has a final name.
    ResultsError
        If the results folder cannot be written or another run holds it.
    """
    prepare_folder(plan.root)
    state = State(cores=request.cores)
    folder = plan.root / "logs"
    folder.mkdir(exist_ok=True)
    stamp = datetime.datetime.now().strftime("%Y%m%dT%H%M%S")
    path = folder / f"run-{stamp}.log"
    finished = False
    with (
        run_lock(plan.root),
        path.open("w", encoding="utf-8") as log,
        Display(console, state) as display,
        forkserver(),
        _ending_jobs() as interrupted,
    ):
        finished = _snakemake(plan, request, state, display, log, dry_run=False)
    if interrupted.is_set():
        raise Interrupted(f"interrupted; run again to go on. The log is {path}")
    if state.failures:
        raise RunFailed("\n".join(_explain(plan, failure) for failure in state.failures))
    if not finished:
        cause = " ".join(" ".join(state.errors[:1]).split()) or "the engine stopped"
        raise RunFailed(f"{cause} (log: {path})")
    return state.total[0]


def dry_run(plan: Plan, request: Request) -> list[Planned]:
    """Return the jobs that would run, in the engine's order, and write nothing.

    Raises
    ------
    StookError
        If the engine cannot plan the run.
    """
    state = State()
    with _leaving_no_trace(plan.root):
        finished = _snakemake(plan, request, state, None, None, dry_run=True)
    if not finished:
        cause = " ".join(" ".join(state.errors[:1]).split()) or "the engine stopped"
        raise RunFailed(cause)
    return [job for job in state.jobs.values() if "_" in job.rule]


def snakefile() -> Path:
    """Return the Snakefile: beside the installed package, or at the top of a checkout.

    Raises
    ------
    ResultsError
        If neither is there.
    """
    package = Path(stook.__file__).resolve().parent
    for path in (package / "pipeline" / "Snakefile", package.parents[1] / "Snakefile"):
        if path.is_file():
            return path
    raise ResultsError(f"{package}: the Snakefile is missing; install stook again")


def _snakemake(
    plan: Plan,
    request: Request,
    state: State,
    display: Display | None,
    log: TextIO | None,
    *,
    dry_run: bool,
) -> bool:
    """Run Snakemake; return whether it came to a good end."""
    from snakemake.api import SnakemakeApi
    from snakemake.exceptions import WorkflowError
    from snakemake.scheduling.greedy import SchedulerSettings
    from snakemake.settings import types as settings

    logger.register()
    handlers = {logger.NAME: logger.LogHandlerSettings(state, display, log)}
    output = settings.OutputSettings(
        dryrun=dry_run,
        printshellcmds=True,
        nocolor=True,
        log_handler_settings=handlers,
        enable_file_logging=False,
    )
    resources = {"mem_mb": int(psutil.virtual_memory().total / 2**20 * 0.9)}
    with SnakemakeApi(output) as api:
        try:
            workflow = api.workflow(
                settings.ResourceSettings(cores=request.cores, resources=resources),
                config_settings=settings.ConfigSettings(config=request.config),
                snakefile=snakefile(),
                workdir=plan.root,
            )
            dag = workflow.dag(settings.DAGSettings(targets={request.until}, force_incomplete=True))
            dag.execute_workflow(
                executor="dryrun" if dry_run else "local",
                execution_settings=settings.ExecutionSettings(lock=not dry_run),
                scheduling_settings=settings.SchedulingSettings(scheduler="greedy"),
                scheduler_settings=SchedulerSettings(),
            )
        except WorkflowError as error:
            api.print_exception(error)
            return False
    return True


def _explain(plan: Plan, failure: Failure) -> str:
    """Return one line: stage, what for, file, cause, and where the log is."""
    stage = stage_of(failure.rule)
    what = " ".join(failure.wildcards.values())
    log = plan.root / failure.log
    file = plan.root / failure.output
    cause = last_error(log)
    return f"{stage}{': ' if what else ''}{what}: {file} was not made: {cause} (log: {log})"


@contextlib.contextmanager
def _ending_jobs() -> Iterator[threading.Event]:
    """End the jobs of this process on Ctrl-C; the event tells that it was pressed."""
    pressed = threading.Event()
    if threading.current_thread() is not threading.main_thread():
        yield pressed
        return

    def stop(number: int, frame: FrameType | None) -> None:
        pressed.set()
        jobs = psutil.Process().children(recursive=True)
        for job in jobs:
            with contextlib.suppress(psutil.NoSuchProcess):
                job.send_signal(signal.SIGTERM)
        killer = threading.Timer(GRACE_SECONDS, _kill, (jobs,))
        killer.daemon = True
        killer.start()
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGINT, stop)
    terminate = signal.getsignal(signal.SIGTERM)
    try:
        yield pressed
    except KeyboardInterrupt:
        pressed.set()
    finally:
        signal.signal(signal.SIGINT, before)
        signal.signal(signal.SIGTERM, terminate)


def _kill(jobs: Sequence[psutil.Process]) -> None:
    for job in jobs:
        with contextlib.suppress(psutil.NoSuchProcess):
            job.kill()


@contextlib.contextmanager
def _leaving_no_trace(root: Path) -> Iterator[None]:
    """Remove what a dry run must create: the results folder, if it was not there before."""
    there = root.exists()
    state = (root / STATE).exists()
    first = root
    while not first.parent.exists():
        first = first.parent
    if not there:
        prepare_folder(root)
    try:
        yield
    finally:
        if not there:
            shutil.rmtree(first, ignore_errors=True)
        elif not state and os.access(root, os.W_OK):
            shutil.rmtree(root / STATE, ignore_errors=True)
