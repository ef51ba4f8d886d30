"""Progress lines: redrawn on a terminal, a line per stage and tenth elsewhere."""

from __future__ import annotations

import io

from service.progress import ProgressLine


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


def test_plain_stream_gets_a_line_for_each_new_stage_and_tenth() -> None:
    stream = io.StringIO()
    with ProgressLine(stream) as line:
        for number in range(101):
            line.update("solve" if number >= 20 else "read", number / 100)
    lines = stream.getvalue().splitlines()
    assert lines[:4] == ["  0 %  read", " 10 %  read", " 20 %  solve", " 30 %  solve"]
    assert len(lines) == 11


def test_terminal_gets_one_line_that_is_redrawn_and_ended() -> None:
    stream = Terminal()
    with ProgressLine(stream) as line:
        line.update("a rather long stage", 0.1, 200.0)
        line.update("end", 1.0)
    first, last = stream.getvalue().removeprefix("\r").split("\r")
    assert "a rather long stage  about 3 min left" in first
    assert last.startswith("[########################] 100 %  end")
    assert last.endswith("\n")
    assert len(last.rstrip("\n")) >= len(first)


def test_terminal_is_not_flooded() -> None:
    stream = Terminal()
    line = ProgressLine(stream)
    for number in range(10_000):
        line.update("solve", number / 20_000)
    assert stream.getvalue().count("\r") < 100


def test_fraction_outside_its_range_is_clipped() -> None:
    stream = Terminal()
    line = ProgressLine(stream)
    line.update("solve", -1.0)
    line.update("write", 7.0)
    assert "  0 %  solve" in stream.getvalue()
    assert "100 %  write" in stream.getvalue()


def test_closing_without_progress_says_nothing() -> None:
    stream = Terminal()
    ProgressLine(stream).close()
    assert stream.getvalue() == ""
