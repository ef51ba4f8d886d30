"""The best strength and wavelet share of a fine grid, found with the truth in hand."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from typing import Final, TypeVar

Item = TypeVar("Item")
Found = TypeVar("Found")


@dataclass(frozen=True)
class Grid:
    """Totals lambda_w + lambda_t, rising by one factor, and shares lambda_w / (lambda_w + lambda_t)."""

    totals: tuple[float, ...]
    shares: tuple[float, ...]


@dataclass(frozen=True)
class Best:
    """The smallest error, where it was, and how many points of the grid were computed for it."""

    error: float
    total: float
    share: float
    points: int


FINE: Final = Grid(tuple(0.02 * 1.25**k for k in range(22)), (0.0, 0.15, 0.3, 0.45, 0.6, 0.75))
COARSE: Final = Grid(tuple(0.03 * 1.6**k for k in range(7)), (0.2, 0.5))


def best_of(error: Callable[[float, float], float], grid: Grid) -> Best:
    """Return the smallest error of a grid: along the totals of each share, downhill from the last share's best.

    The error falls and rises once along the totals, which makes most points of a grid superfluous: steps of two points
    first, then of one, until both neighbours are worse.

    Parameters
    ----------
    error : callable
        error(total, share).
    grid : Grid
    """
    last = len(grid.totals) - 1
    at = last // 2
    best = Best(float("inf"), 0.0, 0.0, 0)
    points = 0
    for share in grid.shares:
        known: dict[int, float] = {}

        def value(index: int, share: float = share, known: dict[int, float] = known) -> float:
            if index not in known:
                known[index] = error(grid.totals[index], share)
            return known[index]

        for step in (2, 1):
            while True:
                lowest = min((max(at - step, 0), at, min(at + step, last)), key=lambda i: (value(i), i != at))
                if lowest == at:
                    break
                at = lowest
        points += len(known)
        if known[at] < best.error:
            best = Best(known[at], grid.totals[at], share, 0)
    return Best(best.error, best.total, best.share, points)


def side_by_side(function: Callable[[Item], Found], items: Iterable[Item], processes: int) -> list[Found]:
    """Return function(item) for every item, some at a time in processes of their own."""
    if processes <= 1:
        return [function(item) for item in items]
    with ProcessPoolExecutor(processes) as pool:
        return list(pool.map(function, items))
