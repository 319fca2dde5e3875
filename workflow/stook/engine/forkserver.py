"""A process with the libraries loaded, from which the jobs of a run are forked.

Starting Python and importing the libraries takes longer than many jobs do (docs/performance.md).
A run therefore starts one server; ``python -m stook.job`` hands it the job's arguments, working
directory, environment and output files, and waits for its exit status. Without a server (Snakemake
alone, a cluster) the same function runs in the job's own process.

A job ends when the process that asked for it ends, however that ended, and the server ends with
the run.
"""

from __future__ import annotations

import contextlib
import json
import os
import select
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from pathlib import Path

ADDRESS = "STOOK_FORKSERVER"
"""Environment variable that holds the server's socket."""

SINGLE_THREADED = {"OPENBLAS_NUM_THREADS": "1"}
"""Environment of every job: matrix products must not depend on the cores."""

GRACE_SECONDS = 5.0
"""Time a job has to clean up when the process that asked for it is gone."""

_LENGTH = 8  # bytes of the length that precedes a request


@contextlib.contextmanager
def forkserver() -> Iterator[None]:
    """Run a server and tell the processes started meanwhile where it is."""
    folder = Path(tempfile.mkdtemp(prefix="stook-"))
    address = str(folder / "jobs")
    listener = socket.socket(socket.AF_UNIX)
    listener.bind(address)
    listener.listen(128)  # before the libraries load, so that no job finds the door closed
    command = [sys.executable, "-m", "stook.engine.forkserver", str(listener.fileno())]
    server = subprocess.Popen(
        command,
        stdin=subprocess.PIPE,
        pass_fds=[listener.fileno()],
        env=os.environ | SINGLE_THREADED,
    )
    listener.close()
    os.environ[ADDRESS] = address
    try:
        yield
    finally:
        os.environ.pop(ADDRESS, None)
        assert server.stdin is not None
        server.stdin.close()
        server.wait()
        shutil.rmtree(folder, ignore_errors=True)


def ask(arguments: list[str]) -> int | None:
    """Let the server run a job; return its exit status, or None if there is no server.

    Parameters
    ----------
    arguments
        What follows ``python -m stook.job``.
    """
    address = os.environ.get(ADDRESS)
    if not address:
        return None
    request = {"arguments": arguments, "folder": str(Path.cwd()), "environment": dict(os.environ)}
    content = json.dumps(request).encode()
    with socket.socket(socket.AF_UNIX) as connection:
        try:
            connection.connect(address)
        except OSError:
            return None
        outputs = [sys.stdout.fileno(), sys.stderr.fileno()]
        socket.send_fds(connection, [len(content).to_bytes(_LENGTH, "big")], outputs)
        connection.sendall(content)
        try:
            status = connection.recv(1)
        except ConnectionError:
            status = b""
        except KeyboardInterrupt:
            return 130
    if not status:
        print("error: the job was killed; was there enough memory?", file=sys.stderr)
        return 1
    return status[0]


def serve(listener: socket.socket) -> None:
    """Fork a job for every request until standard input ends."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the run sees to its jobs
    _load()
    signal.signal(signal.SIGCHLD, signal.SIG_IGN)  # ended jobs leave nothing behind
    while True:
        ready, _, _ = select.select([listener, sys.stdin], [], [])
        if sys.stdin in ready:
            return
        connection, _ = listener.accept()
        if os.fork() == 0:
            listener.close()
            _run(connection)
        connection.close()


def _load() -> None:
    """Import what the jobs import, and make one compiled call, which loads Numba's tables."""
    import importlib

    import numpy as np

    from stook.assessment.layout import STAGES
    from stook.randomness import mix

    mix(np.uint64(0), np.uint64(0))
    for name in ("stook.audit.ledger", *(f"stook.{stage}.job" for stage in STAGES)):
        importlib.import_module(name)


def _run(connection: socket.socket) -> None:
    """Run one job in this forked process, report its status and end the process."""
    from stook.job import end_once, run_arguments

    signal.signal(signal.SIGCHLD, signal.SIG_DFL)
    end_once()
    status = 1
    try:
        head, files, _, _ = socket.recv_fds(connection, _LENGTH, 2)
        content = _receive(connection, int.from_bytes(head, "big"))
        request = json.loads(content)
        for target, file in zip((1, 2), files, strict=True):
            os.dup2(file, target)
            os.close(file)
        os.chdir(request["folder"])
        os.environ.clear()
        os.environ.update(request["environment"])
        threading.Thread(target=_end_with, args=(connection,), daemon=True).start()
        status = run_arguments(request["arguments"])
    except SystemExit as end:
        status = end.code if isinstance(end.code, int) else 1
    except BaseException:
        import traceback

        traceback.print_exc()
    finally:
        sys.stdout.flush()
        sys.stderr.flush()
        with contextlib.suppress(OSError):
            connection.send(bytes([status]))
        os._exit(status)


def _receive(connection: socket.socket, length: int) -> bytes:
    content = b""
    while len(content) < length:
        part = connection.recv(length - len(content))
        if not part:
            raise ConnectionError("the request was cut short")
        content += part
    return content


def _end_with(connection: socket.socket) -> None:
    """End this process when the process that asked for the job is gone."""
    with contextlib.suppress(OSError):
        connection.recv(1)
    os.kill(os.getpid(), signal.SIGTERM)
    time.sleep(GRACE_SECONDS)
    os._exit(1)


if __name__ == "__main__":
    serve(socket.socket(fileno=int(sys.argv[1])))
