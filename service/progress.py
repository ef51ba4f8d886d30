"""Progress on standard error: one line that is redrawn on a terminal; elsewhere a line per stage and tenth done."""

from __future__ import annotations

import sys
import time
from types import TracebackType
from typing import Self, TextIO

_BAR_WIDTH = 24
_REDRAW_SECONDS = 0.1


class ProgressLine:
    """Shows stage, fraction done and time left.

    Parameters
    ----------
    stream : text stream, optional
        Standard error by default, so that standard output stays clean for results.
    """

    def __init__(self, stream: TextIO | None = None) -> None:
        self._stream = sys.stderr if stream is None else stream
        self._is_terminal = self._stream.isatty()
        self._started = time.monotonic()
        self._drawn_at = 0.0
        self._drawn = 0
        self._stage: str | None = None
        self._told_tenth = -1
        self._told_stages: set[str] = set()

    def update(self, stage: str, fraction: float, seconds_left: float | None = None) -> None:
        """Show that `fraction` (0 to 1) of the whole work is done and `stage` is under way."""
        fraction = min(max(fraction, 0.0), 1.0)
        now = time.monotonic()
        is_new_stage = stage != self._stage
        if self._is_terminal:
            if not is_new_stage and fraction < 1 and now - self._drawn_at < _REDRAW_SECONDS:
                return
            self._draw(self._line(stage, fraction, seconds_left, now))
            self._drawn_at = now
        elif stage not in self._told_stages or int(10 * fraction + 1e-9) > self._told_tenth:
            self._told_tenth = int(10 * fraction + 1e-9)
            self._told_stages.add(stage)
            self._stream.write(f"{100 * fraction:3.0f} %  {stage}\n")
            self._stream.flush()
        self._stage = stage

    def close(self) -> None:
        """Leave the last state standing and go to the next line."""
        if self._drawn:
            self._stream.write("\n")
            self._stream.flush()
            self._drawn = 0

    def _line(self, stage: str, fraction: float, seconds_left: float | None, now: float) -> str:
        filled = round(_BAR_WIDTH * fraction)
        if seconds_left is None and 0.05 < fraction < 1:
            seconds_left = (now - self._started) * (1 - fraction) / fraction
        left = "" if seconds_left is None or fraction >= 1 else f"  about {_spoken(seconds_left)} left"
        return f"[{'#' * filled}{'.' * (_BAR_WIDTH - filled)}] {100 * fraction:3.0f} %  {stage}{left}"

    def _draw(self, line: str) -> None:
        self._stream.write("\r" + line + " " * max(0, self._drawn - len(line)))
        self._stream.flush()
        self._drawn = len(line)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def _spoken(seconds: float) -> str:
    if seconds < 90:
        return f"{max(1, round(seconds))} s"
    return f"{round(seconds / 60)} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"
