"""Progress away from a terminal."""

import io

from learnfilter.app.progress import PLAIN_EVERY_S, plain_ticks, progress


class Clock:
    """Seconds that pass only when told to."""

    def __init__(self) -> None:
        self.now = 100.0

    def __call__(self) -> float:
        return self.now


def test_plain_lines_come_seldom_and_at_the_end():
    """Ten steps of one second: after 5 s, after 10 s."""
    stream, clock = io.StringIO(), Clock()
    tick = plain_ticks("train", stream, clock)
    for done in range(1, 11):
        clock.now += PLAIN_EVERY_S / 5
        tick(done, 10, "loss 2")
    assert stream.getvalue() == "train: 5 of 10, 5 s left loss 2\ntrain: 10 of 10 loss 2\n"


def test_nothing_done_yet_promises_no_time():
    """No division by zero, no invented figure."""
    stream, clock = io.StringIO(), Clock()
    tick = plain_ticks("train", stream, clock)
    clock.now += PLAIN_EVERY_S
    tick(0, 10, "")
    assert stream.getvalue() == "train: 0 of 10\n"


def test_a_second_stage_is_timed_by_its_own_pace():
    """Ten slow steps, then ten of a second each: after six of those, four are left."""
    stream, clock = io.StringIO(), Clock()
    tick = plain_ticks("train", stream, clock)
    clock.now += 1000
    tick(10, 10, "")
    for done in range(1, 7):
        clock.now += 1.0
        tick(done, 10, "")
    assert stream.getvalue().splitlines()[-1] == "train: 5 of 10, 5 s left"


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_a_terminal_gets_a_bar():
    """The label and the share done are drawn."""
    stream = Terminal()
    with progress("train", stream) as tick:
        tick(5, 10, "loss 2")
    assert "train" in stream.getvalue() and "50%" in stream.getvalue()
