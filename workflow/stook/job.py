"""The entry of every job: ``python -m stook.job STAGE NAME --results FOLDER key=value ...``.

It calls the function NAME of ``stook.<stage>.job`` with the assessment of the results folder and
the wildcards. A rule called ``correct_tile`` is thus ``stook.correct.job.tile``. The command is
printed in every log, so that one job can be repeated by hand.

Heavy modules are imported only after the watch on the parent has begun.
"""

from __future__ import annotations

import os
import threading
import time

_PARENT = os.getppid()
"""The process that started this one, noted before anything else."""


def main() -> int:
    """Run the job of the command line; return its exit status.

    Inside a run the job is handed to the run's server, which has the libraries loaded.
    """
    import sys

    from stook.engine.forkserver import SINGLE_THREADED, ask

    os.environ.update(SINGLE_THREADED)
    _end_with_parent()
    end_once()
    status = ask(sys.argv[1:])
    return run_arguments(sys.argv[1:]) if status is None else status


def run_arguments(arguments: list[str]) -> int:
    """Run one job in this process; return its exit status."""
    import argparse
    import shlex
    import sys

    parser = argparse.ArgumentParser(prog="python -m stook.job", description=__doc__)
    parser.add_argument("stage")
    parser.add_argument("name")
    parser.add_argument("--results", required=True, help="results folder of the assessment")
    parser.add_argument("--threads", type=int, default=1)
    parser.add_argument("wildcards", nargs="*", help="key=value")
    given = parser.parse_intermixed_args(arguments)
    wildcards = dict(text.split("=", 1) for text in given.wildcards)
    print(f"python -m stook.job {shlex.join(arguments)}", flush=True)

    from stook.errors import StookError

    try:
        run_job(given.stage, given.name, given.results, wildcards, given.threads)
    except StookError as error:
        print(f"error: {' '.join(str(error).splitlines())}", file=sys.stderr)
        return 1
    except MemoryError:
        print("error: out of memory; lower store.block_mb or use fewer cores", file=sys.stderr)
        return 1
    except KeyboardInterrupt:
        print("error: interrupted", file=sys.stderr)
        return 130
    return 0


def run_job(stage: str, name: str, results: str, wildcards: dict[str, str], threads: int) -> None:
    """Call the function of a job with Dask limited to the given threads."""
    import importlib

    import dask

    from stook.assessment.load import load_resolved

    function = getattr(importlib.import_module(f"stook.{stage}.job"), name)
    with dask.config.set(scheduler="threads", num_workers=threads):
        function(load_resolved(results), **wildcards)


def end_once() -> None:
    """Let the first signal end this job; those that follow must not disturb its clean-up.

    Ctrl-C reaches a job from the terminal and, as SIGTERM, from the run.
    """
    import signal
    import sys
    from types import FrameType

    def stop(number: int, frame: FrameType | None) -> None:
        for each in (signal.SIGINT, signal.SIGTERM):
            signal.signal(each, signal.SIG_IGN)
        if number == signal.SIGINT:
            raise KeyboardInterrupt
        sys.exit(143)

    for each in (signal.SIGINT, signal.SIGTERM):
        signal.signal(each, stop)


def _end_with_parent() -> None:
    """End this process when the process that started it is gone, however it ended."""

    def watch() -> None:
        while os.getppid() == _PARENT:
            time.sleep(0.5)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


if __name__ == "__main__":
    raise SystemExit(main())
