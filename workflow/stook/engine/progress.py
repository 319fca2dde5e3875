"""From the engine's events to one moving line: stage, jobs done of all, time left."""

from __future__ import annotations

import time
from collections import Counter, defaultdict
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from rich.console import Console
from rich.progress import BarColumn, Progress, TaskID, TextColumn

from stook.assessment.layout import STAGES

COMMAND = "python -m stook.job "
"""How the line begins that a job writes first into its log."""


@dataclass
class Failure:
    """A job that failed: its rule, wildcards, first output and log, as the engine names them."""

    rule: str
    wildcards: dict[str, str]
    output: str
    log: str


@dataclass
class Planned:
    """A job that would run, and the engine's reason."""

    rule: str
    wildcards: dict[str, str]
    reason: str


@dataclass
class State:
    """What has happened so far; `clock` gives seconds."""

    cores: int = 1
    clock: Callable[[], float] = time.monotonic
    wanted: Counter[str] = field(default_factory=Counter)
    done: Counter[str] = field(default_factory=Counter)
    seconds: defaultdict[str, float] = field(default_factory=lambda: defaultdict(float))
    running: dict[int, tuple[str, float]] = field(default_factory=dict)
    jobs: dict[int, Planned] = field(default_factory=dict)
    failures: list[Failure] = field(default_factory=list)
    errors: list[str] = field(default_factory=list)

    def take(self, event: str, values: Mapping[str, Any]) -> None:
        """Take in one event of the engine.

        Parameters
        ----------
        event
            Name of the event; others than those named here are ignored.
        values
            Its values.
        """
        match event:
            case "run_info":
                counts = values["stats"]
                self.wanted = Counter({k: n for k, n in counts.items() if "_" in k})
            case "job_info":
                job = Planned(values["rule_name"], dict(values["wildcards"]), values["reason"])
                self.jobs[values["jobid"]] = job
                if "_" in job.rule:
                    self.running[values["jobid"]] = (job.rule, self.clock())
            case "job_finished":
                if rule_start := self.running.pop(values["job_id"], None):
                    rule, start = rule_start
                    self.done[rule] += 1
                    self.seconds[rule] += self.clock() - start
            case "job_error":
                self._fail(values)

    def _fail(self, values: Mapping[str, Any]) -> None:
        job = values["jobid"]
        self.running.pop(job, None)
        planned = self.jobs.get(job)
        outputs, logs = list(values["output"]), list(values["log"])
        self.failures.append(
            Failure(
                values["rule_name"],
                planned.wildcards if planned else {},
                outputs[0] if outputs else "",
                logs[0] if logs else "",
            )
        )

    @property
    def total(self) -> tuple[int, int]:
        """Jobs done, and all jobs."""
        return sum(self.done.values()), sum(self.wanted.values())

    def of_stage(self, stage: str) -> tuple[int, int]:
        """Jobs done, and all jobs, of one stage."""
        return tuple(  # type: ignore[return-value]
            sum(n for rule, n in counts.items() if stage_of(rule) == stage)
            for counts in (self.done, self.wanted)
        )

    @property
    def stage(self) -> str:
        """The first stage that is not finished."""
        for stage in STAGES:
            done, wanted = self.of_stage(stage)
            if done < wanted:
                return stage
        return ""

    @property
    def seconds_left(self) -> float | None:
        """Estimate of the time left; None before the first job has finished.

        Jobs of a rule take as long as those of that rule did so far; of a rule of which none has
        finished, as long as the mean of all.
        """
        done, _ = self.total
        if not done:
            return None
        mean = sum(self.seconds.values()) / done
        now = self.clock()
        left = 0.0
        for rule, wanted in self.wanted.items():
            each = self.seconds[rule] / self.done[rule] if self.done[rule] else mean
            left += each * (wanted - self.done[rule])
            for other, start in self.running.values():
                left -= min(each, now - start) if other == rule else 0.0
        return left / max(1, self.cores)


def stage_of(rule: str) -> str:
    """Return the stage of a rule ``<stage>_<name>``."""
    return rule.partition("_")[0]


def duration(seconds: float) -> str:
    """Return a time in words a reader takes in at once: seconds, minutes, or hours and minutes."""
    if seconds < 90:
        return f"{max(1, round(seconds))} s"
    if seconds < 5400:
        return f"{round(seconds / 60)} min"
    hours, minutes = divmod(round(seconds / 60), 60)
    return f"{hours} h {minutes:02d} min"


class Display:
    """The moving line on a terminal; a plain line per finished stage elsewhere.

    Use as a context manager; call `update` after every event.
    """

    def __init__(self, console: Console, state: State) -> None:
        self.console = console
        self.state = state
        self._reported: set[str] = set()
        self._start = state.clock()
        self._progress = Progress(
            TextColumn("{task.fields[stage]:<9}"),
            BarColumn(bar_width=30),
            TextColumn("{task.completed:g}/{task.total:g} jobs"),
            TextColumn("{task.fields[left]}"),
            console=console,
            transient=True,
            disable=not console.is_terminal,
        )
        self._task: TaskID | None = None

    def __enter__(self) -> Display:
        self._progress.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._progress.stop()

    def update(self) -> None:
        """Show what the state says now."""
        done, total = self.state.total
        if not total:
            return
        for stage in STAGES:
            finished, wanted = self.state.of_stage(stage)
            if wanted and finished == wanted and stage not in self._reported:
                self._reported.add(stage)
                taken = duration(self.state.clock() - self._start)
                jobs = f"{wanted} job" if wanted == 1 else f"{wanted} jobs"
                self._progress.console.print(
                    f"{stage:<9} {jobs} done, {done}/{total} after {taken}", highlight=False
                )
        left = self.state.seconds_left
        words = "" if left is None or done == total else f"about {duration(left)} left"
        if self._task is None:
            self._task = self._progress.add_task("", total=total, stage="", left="")
        self._progress.update(
            self._task, total=total, completed=done, stage=self.state.stage, left=words
        )


def last_error(log: Path) -> str:
    """Return the cause of a failure from a job's log: its last line that says something.

    A user's mistake is logged as ``error: ...``; of a traceback the last line names the exception.
    The first line of a log is the command, and no cause.
    """
    try:
        lines = log.read_text(encoding="utf-8", errors="replace").splitlines()
    except OSError:
        return "no log was written"
    told = [line.strip() for line in lines if line.strip() and not line.startswith(COMMAND)]
    marked = [line for line in told if line.startswith("error: ")]
    if marked:
        return marked[-1].removeprefix("error: ")
    return told[-1] if told else "the job was ended before it was done"
