"""From the engine's events to the moving line, with a clock of our own."""

from __future__ import annotations

import io

import pytest
from rich.console import Console
from stook.engine.progress import Display, State, duration, last_error


class Clock:
    now = 0.0

    def __call__(self):
        return self.now


@pytest.fixture
def clock():
    return Clock()


@pytest.fixture
def state(clock):
    state = State(cores=2, clock=clock)
    state.take("run_info", {"stats": {"prepare_tile": 2, "season_tile": 4, "all": 1}})
    return state


def job(state, number, rule, seconds, clock):
    """Run one job from its beginning to its end."""
    state.take(
        "job_info", {"jobid": number, "rule_name": rule, "wildcards": {}, "reason": "because"}
    )
    clock.now += seconds
    state.take("job_finished", {"job_id": number})


def test_counts_leave_out_what_is_no_job(state, clock):
    assert state.total == (0, 6)
    assert state.stage == "prepare"
    assert state.seconds_left is None
    job(state, 1, "prepare_tile", 10, clock)
    assert state.of_stage("prepare") == (1, 2)
    job(state, 2, "prepare_tile", 10, clock)
    assert state.stage == "season"
    job(state, 3, "all", 0, clock)
    assert state.total == (2, 6)


def test_time_left(state, clock):
    job(state, 1, "prepare_tile", 10, clock)
    # One more of 10 s and four unknown ones at the mean of 10 s, on two cores.
    assert state.seconds_left == pytest.approx((10 + 40) / 2)
    job(state, 2, "prepare_tile", 30, clock)
    # Four unknown ones at the mean of 20 s.
    assert state.seconds_left == pytest.approx(80 / 2)
    job(state, 3, "season_tile", 4, clock)
    assert state.seconds_left == pytest.approx(3 * 4 / 2)
    state.take(
        "job_info", {"jobid": 4, "rule_name": "season_tile", "wildcards": {}, "reason": "because"}
    )
    clock.now += 3  # three of its four seconds are over
    assert state.seconds_left == pytest.approx((3 * 4 - 3) / 2)


def test_failure_carries_wildcards_and_log(state):
    state.take(
        "job_info",
        {"jobid": 7, "rule_name": "prepare_tile", "wildcards": {"tile": "00"}, "reason": "r"},
    )
    state.take(
        "job_error",
        {"jobid": 7, "rule_name": "prepare_tile", "output": ["a.nc"], "log": ["a.log"]},
    )
    (failure,) = state.failures
    assert (failure.rule, failure.wildcards) == ("prepare_tile", {"tile": "00"})
    assert (failure.output, failure.log) == ("a.nc", "a.log")
    assert state.running == {}


def test_a_line_per_finished_stage_where_there_is_no_terminal(state, clock):
    shown = io.StringIO()
    with Display(Console(file=shown, width=100), state) as display:
        for number, rule in enumerate(["prepare_tile"] * 2 + ["season_tile"] * 4):
            job(state, number, rule, 40, clock)
            display.update()
    assert shown.getvalue().splitlines() == [
        "prepare   2 jobs done, 2/6 after 80 s",
        "season    4 jobs done, 6/6 after 4 min",
    ]


def test_one_moving_line_on_a_terminal(state, clock):
    shown = io.StringIO()
    console = Console(file=shown, width=100, force_terminal=True, color_system=None)
    with Display(console, state) as display:
        job(state, 1, "prepare_tile", 60, clock)
        display.update()
        display._progress.refresh()
        text = shown.getvalue()
    assert "1/6 jobs" in text
    assert "about 2 min left" in text  # five of 60 s on two cores
    assert "prepare" in text


@pytest.mark.parametrize(
    ("seconds", "words"),
    [(0.2, "1 s"), (89, "89 s"), (90, "2 min"), (5399, "90 min"), (5400, "1 h 30 min")],
)
def test_duration(seconds, words):
    assert duration(seconds) == words


@pytest.mark.parametrize(
    ("text", "cause"),
    [
        ("python -m stook.job\nerror: x.nc: is broken\n\n", "x.nc: is broken"),
        ("Traceback\n  File\nValueError: 3\n", "ValueError: 3"),
        ("python -m stook.job season tile\n", "the job was ended before it was done"),
        ("", "the job was ended before it was done"),
    ],
)
def test_last_error(tmp_path, text, cause):
    path = tmp_path / "job.log"
    path.write_text(text, encoding="utf-8")
    assert last_error(path) == cause


def test_last_error_without_log(tmp_path):
    assert last_error(tmp_path / "none.log") == "no log was written"
