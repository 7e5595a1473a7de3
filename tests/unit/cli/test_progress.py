from __future__ import annotations

import io

import pytest

from perdure._cli.progress import LineReporter, SilentReporter, TerminalReporter, reporter_for


class Clock:
    """Seconds that pass only when told."""

    def __init__(self) -> None:
        self.now = 1000.0

    def __call__(self) -> float:
        return self.now


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


class Gone(io.StringIO):
    """A reader that went away."""

    def write(self, text: str) -> int:
        raise BrokenPipeError


def test_lines_at_new_stages_and_every_thirty_seconds() -> None:
    stream, clock = io.StringIO(), Clock()
    report = LineReporter(stream, clock)
    report("pilot", 0, 1)
    clock.now += 5.0
    report("bursts", 0, 400)
    for second in range(1, 92):
        clock.now += 1.0
        report("bursts", 2 * second, 400)
    report("done", 1, 1)
    assert stream.getvalue().splitlines() == [
        "pilot",
        "bursts 0/400",
        "bursts 60/400, elapsed 30 s, left 170 s",
        "bursts 120/400, elapsed 60 s, left 140 s",
        "bursts 180/400, elapsed 90 s, left 110 s",
        "done",
    ]


def test_a_new_wave_counts_anew_without_a_line() -> None:
    stream, clock = io.StringIO(), Clock()
    report = LineReporter(stream, clock)
    report("bursts", 90, 100)
    clock.now += 20.0
    report("bursts", 1, 50)
    assert stream.getvalue().splitlines() == ["bursts 90/100"]
    clock.now += 15.0
    report("bursts", 11, 50)
    # 10 pieces in the 15 s since the wave was first heard of, not 11 in 35 s
    assert stream.getvalue().splitlines()[1:] == ["bursts 11/50, elapsed 15 s, left 58 s"]


def test_terminal_draws_over_one_line() -> None:
    stream, clock = Terminal(), Clock()
    report = TerminalReporter(stream, clock)
    report("bursts", 0, 400)
    clock.now += 61.0
    report("bursts", 120, 400)
    clock.now += 0.01
    report("bursts", 121, 400)  # too soon to draw
    report("bursts", 400, 400)  # the last is always drawn
    report("matrix", 0, 1)
    report.close()
    bursts, matrix, rest = stream.getvalue().split("\n")
    assert [text.rstrip() for text in bursts.split("\r")] == [
        "",
        "bursts  [------------------------]  0/400",
        "bursts  [#######-----------------]  120/400  left 142 s",
        "bursts  [########################]  400/400  left 0.0 s",
    ]
    assert (matrix, rest) == ("\rmatrix", "")


def test_shorter_text_covers_the_longer_one() -> None:
    stream, clock = Terminal(), Clock()
    report = TerminalReporter(stream, clock)
    for done, total in ((999, 1000), (0, 10)):
        clock.now += 1.0
        report("bursts", done, total)
    _, first, second = stream.getvalue().split("\r")
    assert len(second) >= len(first)
    assert len(second.rstrip()) < len(first)


@pytest.mark.parametrize("kind", [LineReporter, TerminalReporter])
def test_a_stream_that_is_gone_ends_no_work(kind: type[LineReporter] | type[TerminalReporter]) -> None:
    report = kind(Gone())
    report("pilot", 0, 1)
    report("bursts", 1, 2)
    report.close()


def test_reporter_fits_the_stream() -> None:
    assert isinstance(reporter_for(quiet=False, stream=Terminal()), TerminalReporter)
    assert isinstance(reporter_for(quiet=False, stream=io.StringIO()), LineReporter)
    assert isinstance(reporter_for(quiet=True, stream=Terminal()), SilentReporter)
