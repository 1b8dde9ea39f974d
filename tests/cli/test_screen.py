"""What is said while a command works: lines, a bar on a terminal, how far and how long."""

import io
import re

import pytest

from basinwright.outputs.screen import Screen
from basinwright.progress import heard_by, tell


class Clock:
    def __init__(self):
        self.now = 100.0

    def __call__(self):
        return self.now


class Terminal(io.StringIO):
    def isatty(self):
        return True


@pytest.fixture
def clock():
    return Clock()


def work(clock, steps, seconds, unit="tiles"):
    for done in range(1, steps + 1):
        clock.now += seconds
        tell(done, steps, unit)


def test_steps_are_lines_with_the_time_since_the_start(clock):
    stream = io.StringIO()
    with Screen(stream, clock) as screen:
        clock.now += 2.34
        screen("Reading the terrain")
    assert stream.getvalue() == "[   2.3 s] Reading the terrain\n"


def test_a_long_step_says_every_ten_seconds_how_far_it_is(clock):
    stream = io.StringIO()
    with Screen(stream, clock) as screen:
        screen("Routing")
        work(clock, 64, 0.5)
    assert stream.getvalue().splitlines() == [
        "[   0.0 s] Routing",
        "[  10.0 s]   31 %, 20 of 64 tiles, 2 tiles/s, 22 s left",
        "[  20.0 s]   62 %, 40 of 64 tiles, 2 tiles/s, 12 s left",
        "[  30.0 s]   94 %, 60 of 64 tiles, 2 tiles/s, 2 s left",
    ]


def test_a_second_loop_of_the_step_has_its_own_rate(clock):
    stream = io.StringIO()
    with Screen(stream, clock) as screen:
        screen("Routing")
        work(clock, 4, 6.0)
        work(clock, 10, 60.0)
    assert "[  84.0 s]   10 %, 1 of 10 tiles, 0.0167 tiles/s, 9 min left" in stream.getvalue()


def test_hours_are_told_as_hours_and_shares_without_a_rate(clock):
    stream = io.StringIO()
    with Screen(stream, clock) as screen:
        screen("Routing")
        clock.now += 3600.0
        tell(25, 100, "%")
    assert "25 %, 3.0 h left" in stream.getvalue()


def test_a_short_step_says_nothing_more(clock):
    for stream in (io.StringIO(), Terminal()):
        with Screen(stream, clock) as screen:
            screen("Tracing")
            work(clock, 9, 0.1)
        assert stream.getvalue().count("\n") == 1
        assert "%" not in stream.getvalue()


def test_a_terminal_gets_a_bar_that_goes_away(clock):
    stream = Terminal()
    with Screen(stream, clock) as screen:
        screen("Routing")
        work(clock, 4, 1.5, "pages")
        screen("Writing")
    text = stream.getvalue()
    assert re.search(r"75 %, 3 of 4 pages, 0\.667 pages/s, 2 s left", text)
    assert "━" in text
    assert text.splitlines()[-1].endswith("Writing")


def test_what_is_told_outside_reaches_nobody(clock):
    stream = io.StringIO()
    heard = []
    with Screen(stream, clock):
        pass
    clock.now += 100.0
    tell(1, 2, "tiles")
    with heard_by(lambda *far: heard.append(far)):
        tell(1, 2, "tiles")
    tell(2, 2, "tiles")
    assert heard == [(1, 2, "tiles")]
    assert stream.getvalue() == ""
