"""What a figure is: a bar and an aim, how it is measured, and how the results are shown."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

Unit = Literal["U", "x", "ratio"]


@dataclass(frozen=True)
class Bar:
    """What one number must reach.

    Attributes
    ----------
    name : str
        Unique over all figures.
    what : str
        In words, for the table.
    unit : {"U", "x", "ratio"}
        `U`: CPU time in units of the yardstick (`benchmarks.machine.yardstick`); `x`: a multiple; `ratio`: one number
        over another.
    bar, aim : float
        The number must be at most this, or at least this where `at_least`.
    """

    name: str
    what: str
    unit: Unit
    bar: float
    aim: float | None = None
    at_least: bool = False

    def is_met(self, value: float, limit: float) -> bool:
        """Whether a value is on the right side of a limit."""
        return value >= limit if self.at_least else value <= limit


@dataclass(frozen=True)
class Result:
    """One measured number: CPU seconds where the bar's unit is `U`.

    Attributes
    ----------
    details : dict
        What it is made of, as plain JSON.
    text : str
        The same for a reader at a terminal, where there is more to say.
    """

    bar: str
    value: float
    details: dict[str, Any] = field(default_factory=dict)
    text: str = ""


@dataclass(frozen=True)
class Run:
    """How the figures are measured this time.

    Attributes
    ----------
    reduced : bool
        Small sizes that only show that everything works; bars do not apply.
    repeats : int or None
        Times every timed figure is repeated for its median; None: as often as the figure itself thinks right.
    processes : int
        Cases of the error figures computed side by side.
    folder : Path
        For scans and images, removed afterwards.
    """

    reduced: bool
    repeats: int | None
    processes: int
    folder: Path

    def times(self, usual: int) -> int:
        """How often to repeat a figure that would repeat `usual` times by itself."""
        return self.repeats or (1 if self.reduced else usual)


@dataclass(frozen=True)
class Figure:
    """A group of numbers that are measured together.

    Attributes
    ----------
    measure : callable
        Returns one `Result` for each bar.
    work : callable
        What `--profile` looks at: prepares everything and returns the function whose time is the figure's.
    """

    name: str
    bars: tuple[Bar, ...]
    measure: Callable[[Run], list[Result]]
    work: Callable[[Run], Callable[[], Any]]


@dataclass(frozen=True)
class Row:
    """One line of the table."""

    bar: Bar
    value: float
    details: dict[str, Any]
    yardstick_ms: tuple[float, float]

    @property
    def is_met(self) -> bool:
        """Whether the bar is met."""
        return self.bar.is_met(self.value, self.bar.bar)

    @property
    def is_aim_met(self) -> bool | None:
        """Whether the aim is met; None without one."""
        return None if self.bar.aim is None else self.bar.is_met(self.value, self.bar.aim)

    def as_dict(self) -> dict[str, Any]:
        """Plain JSON form."""
        return {
            "name": self.bar.name,
            "what": self.bar.what,
            "unit": self.bar.unit,
            "value": self.value,
            "bar": self.bar.bar,
            "aim": self.bar.aim,
            "at_least": self.bar.at_least,
            "met": self.is_met,
            "aim_met": self.is_aim_met,
            "yardstick_ms": list(self.yardstick_ms),
            "details": self.details,
        }


def rows_of(figure: Figure, results: list[Result], yardsticks: tuple[float, float]) -> list[Row]:
    """Bring results to their bars: CPU seconds become units of the yardstick, the mean of before and after.

    Raises
    ------
    ValueError
        When a figure does not return exactly one number for each of its bars.
    """
    found = {result.bar: result for result in results}
    if len(results) != len(figure.bars) or set(found) != {bar.name for bar in figure.bars}:
        raise ValueError(f"{figure.name} returned {sorted(found)}; one number for each of its bars is needed")
    unit = sum(yardsticks) / 2
    rows = []
    for bar in figure.bars:
        result = found[bar.name]
        value = result.value / unit if bar.unit == "U" else result.value
        milliseconds = (1e3 * yardsticks[0], 1e3 * yardsticks[1])
        rows.append(Row(bar, value, in_units(result.details, unit), milliseconds))
    return rows


def in_units(details: Any, unit: float) -> Any:
    """Details with every `..._seconds` followed by the same in units of the yardstick, `..._units`."""
    if isinstance(details, list):
        return [in_units(item, unit) for item in details]
    if not isinstance(details, dict):
        return details
    out: dict[str, Any] = {}
    for name, value in details.items():
        out[name] = in_units(value, unit)
        if name.endswith("_seconds"):
            out[f"{name.removesuffix('_seconds')}_units"] = value / unit
    return out


HEAD = ("figure", "value", "bar", "aim", "met")


def cells(row: Row, *, is_judged: bool) -> tuple[str, ...]:
    """One row as text; without a verdict where sizes were reduced."""
    bar = row.bar

    def shown(value: float | None) -> str:
        if value is None:
            return ""
        number = (
            f"{value:,.0f}" if abs(value) >= 100 else f"{value:.3g}" if bar.unit == "U" else f"{value:.3f}"
        )
        return f"{number} {bar.unit}" if bar.unit != "ratio" else number

    met = "no" if not row.is_met else "yes, aim too" if row.is_aim_met else "yes"
    if not is_judged:
        met = ""
    sign = "at least " if bar.at_least else ""
    aim = f"{sign}{shown(bar.aim)}" if bar.aim is not None else ""
    return bar.what, shown(row.value), f"{sign}{shown(bar.bar)}", aim, met


def text_table(rows: list[Row], *, is_judged: bool = True) -> str:
    """Return the table for a terminal."""
    lines = [HEAD, *(cells(row, is_judged=is_judged) for row in rows)]
    widths = [max(len(line[i]) for line in lines) for i in range(len(HEAD))]
    shown = ["  ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)) for line in lines]
    return "\n".join(line.rstrip() for line in (shown[0], "-" * sum(widths), *shown[1:]))


def markdown_table(rows: list[Row], *, is_judged: bool = True) -> str:
    """Return the table for a document."""
    lines = [HEAD, ("---",) * len(HEAD), *(cells(row, is_judged=is_judged) for row in rows)]
    return "\n".join(f"| {' | '.join(line)} |" for line in lines)
