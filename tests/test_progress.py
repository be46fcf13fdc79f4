"""What is said of long work: how far it is, how fast it goes, and how long it will take."""

from __future__ import annotations

import io
import os
import pty
import random

import pytest

from tilemap.progress import EVERY_S, Lines, Pace, shown, written


class Clock:
    """A clock that goes on when it is told to."""

    def __init__(self) -> None:
        self.now = 100.0

    def __call__(self) -> float:
        return self.now


def told(costs: list[float], clock: Clock, done_before: float = 0.0) -> list[tuple[float, float, float]]:
    """(share done, time left as said, time left as it was) after each of some equal pieces of work with these costs."""
    pace, total = Pace(clock), len(costs) + done_before
    pace.report(0)
    if done_before:
        pace.report(done_before)
    seen = []
    for number, cost in enumerate(costs, 1):
        clock.now += cost
        pace.report(done_before + number)
        seen.append(((done_before + number) / total, pace.left(total), sum(costs[number:])))
    return seen


def off(seen: list[tuple[float, float, float]], after: float) -> float:
    """By how much the whole time was said wrong, at most, once this share was done, as a share of it."""
    whole = seen[0][2]
    return max(abs(said - real) / whole for share, said, real in seen if share > after)


def test_the_time_left_is_right_to_a_fifth_from_a_third_of_the_way_on_where_pieces_cost_about_the_same():
    costs = [random.Random(1).uniform(0.6, 1.4) for _ in range(200)]
    assert off(told(costs, Clock()), 1 / 3) < 0.2


def test_a_slow_first_piece_does_not_spoil_it():
    assert off(told([30.0] + [1.0] * 100, Clock()), 1 / 3) < 0.2


def test_work_done_by_a_build_that_was_stopped_does_not_spoil_it():
    assert off(told([1.0] * 100, Clock(), done_before=300.0), 0.8) < 0.2


def test_nothing_is_said_before_anything_is_known():
    pace = Pace(Clock())
    assert (pace.speed(), pace.left(10), written("reading gas", pace, 10)) == (None, None, "")
    pace.report(0)
    assert written("reading gas", pace, 10) == ""


@pytest.mark.parametrize(
    ("phase", "expected"),
    [
        ("reading gas", "2 M particles/s, 45 s left"),
        ("drawing gas", "2 M pixels/s, 45 s left"),
        ("publishing", "45 s left"),
    ],
)
def test_speed_and_time_left_are_said_in_words(phase, expected):
    clock = Clock()
    pace = Pace(clock)
    for _ in range(6):
        pace.report((clock.now - 100.0) * 2e6)
        clock.now += 1
    assert written(phase, pace, 1e8 + 2e6) == expected


def test_a_log_has_a_line_at_each_end_and_one_now_and_then():
    clock, stream = Clock(), io.StringIO()
    lines = Lines(stream, clock)
    for done in range(0, 101):
        lines("drawing gas", done * 1e6, 1e8)
        clock.now += 1
    said = stream.getvalue().splitlines()
    assert said[0] == "drawing gas ..."
    assert said[1] == "drawing gas: 30%, 1 M pixels/s, 1:10 min left"
    assert said[-1] == "drawing gas: 100.0 s"
    assert len(said) == 2 + 100 // EVERY_S


def test_a_terminal_shows_share_speed_and_time_left():
    leader, follower = pty.openpty()
    with os.fdopen(follower, "w") as stream, shown(stream) as report:
        for done in range(5):
            report("reading gas", done * 10, 100)
    text = os.read(leader, 1 << 16).decode()
    os.close(leader)
    assert "reading gas" in text and "40%" in text and "particles/s" in text and "left" in text
