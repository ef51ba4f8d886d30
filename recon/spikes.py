"""Spikes: isolated samples that stand out of their surroundings in k-space (electric discharge, interference).

A sample is a spike where its power p, summed over coils in units of each coil's median, exceeds `FACTOR` times

    max over p(k'),   k' on the same line 2 to 6 samples away, or on the two lines on either side within 5 samples

and where neither the mirrored position -k nor the ray towards the centre holds anything of its size: objects with
straight edges have narrow streaks through the centre, symmetric about it, and spikes have not. In noise, or in the
speckle of an object (exponential power), so isolated a maximum comes up by chance once in 10^8 samples. Close to the
centre nothing can be told.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import maximum_filter1d

from recon.findings import Finding

#: power of a spike over the largest of its surroundings.
FACTOR: Final = 8.0
#: samples on either side of a spike that belong to it.
HALF_WIDTH: Final = 1
#: surroundings: samples along a line, and lines (in units of their mean distance where samples are scattered).
REACH: Final = 5
LINES: Final = 2
#: how far from its mirrored position, or a ray, kin may lie.
KIN: Final = 2
#: a coil's median is taken of about so many samples.
MEDIAN_SAMPLES: Final = 4096
#: distance from the centre, in samples, below which nothing is called a spike.
CENTRE: Final = 6
#: and its power over the largest of the plane: what is smaller is rounding.
SMALLEST_POWER: Final = 1e-10


def find_spikes(kspace: NDArray[Any], mask: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Positions of the spikes of one plane.

    Parameters
    ----------
    kspace : complex (coil, rows, columns)
        As measured.
    mask : bool (rows, columns)

    Returns
    -------
    int (spike, 2)
        Row and column of each, in order.
    """
    rows, columns = np.flatnonzero(mask.any(axis=1)), np.flatnonzero(mask.any(axis=0))
    if len(rows) == 0:
        return np.zeros((0, 2), np.int64)
    is_whole = len(rows) == mask.shape[0] and len(columns) == mask.shape[1]
    measured = mask if is_whole else mask[np.ix_(rows, columns)]
    power = _power(kspace if is_whole else kspace[:, rows[:, np.newaxis], columns], measured)
    distance = np.hypot(*np.ix_(rows - mask.shape[0] // 2, columns - mask.shape[1] // 2))
    wider = 1 / np.sqrt(measured.mean())
    stands_out = (
        (power > FACTOR * _surroundings(power, wider))
        & (power > SMALLEST_POWER * power.max())
        & (distance > CENTRE)
    )
    found = np.argwhere(stands_out)
    if len(found) == 0:
        return np.zeros((0, 2), np.int64)
    found = np.stack([rows[found[:, 0]], columns[found[:, 1]]], axis=1)
    whole = np.zeros(mask.shape, power.dtype)
    whole[np.ix_(rows, columns)] = power
    return np.array([at for at in found if not _has_kin(whole, mask, at)], np.int64).reshape(-1, 2)


def remove_spikes(
    kspace: NDArray[Any], mask: NDArray[np.bool_], *, whole_lines: bool = False
) -> NDArray[np.bool_]:
    """The mask without the spikes of a plane and the samples beside them along the columns, or without their lines."""
    found = find_spikes(kspace, mask)
    if len(found) == 0:
        return mask
    cleared = mask.copy()
    for row, column in found:
        window = slice(None) if whole_lines else slice(max(0, column - HALF_WIDTH), column + HALF_WIDTH + 1)
        cleared[row, window] = False
    return cleared


class SpikeCount:
    """Counts spikes plane by plane, and remembers where the first was."""

    def __init__(self, axes: tuple[str, str]) -> None:
        self.axes = axes
        self.count = self.planes = 0
        self.first: str | None = None

    def see(self, where: str, found: NDArray[np.int64]) -> None:
        """Take in the spikes of one plane, which is at `where`."""
        self.count += len(found)
        self.planes += len(found) > 0
        if len(found) and self.first is None:
            place = (f"{axis} {position}" for axis, position in zip(self.axes, found[0], strict=True))
            self.first = ", ".join([*([where] if where else []), *place])

    def findings(self) -> list[Finding]:
        """The finding about spikes, if there are any."""
        if self.first is None:
            return []
        return [
            Finding(
                "spike",
                "warning",
                f"{self.count} isolated sample(s) stand out of k-space, first at {self.first}, and show as stripes: "
                f'look for electric discharge or interference, and set exclude to ["spikes"] to leave them out.',
                self.first,
                {"samples": self.count, "planes": self.planes},
            )
        ]


def _power(kspace: NDArray[Any], mask: NDArray[np.bool_]) -> NDArray[Any]:
    """Sum over coils of |y|^2 over the coil's median, zero where not sampled."""
    total = np.zeros(mask.shape, np.float32)
    for channel in kspace:
        squares = channel.real**2 + channel.imag**2
        values = squares[mask]
        median = float(np.median(values[:: len(values) // MEDIAN_SAMPLES | 1]))
        # of a coil that is mostly silent, the mean: a dead one adds nothing
        unit = median or float(values.mean(dtype=np.float64))
        if unit > 0:
            total += squares / np.float32(unit)
    total[~mask] = 0
    return total


def _surroundings(power: NDArray[Any], wider: float) -> NDArray[Any]:
    """Largest power about each position, its own cluster left out."""
    reach, lines = int(np.ceil(REACH * wider)), int(np.ceil(LINES * wider))
    along = maximum_filter1d(power, reach, axis=1, mode="constant")
    shift = HALF_WIDTH + 1 + reach // 2
    largest = np.maximum(_shifted(along, shift, 1), _shifted(along, -shift, 1))
    across = maximum_filter1d(power, 2 * reach + 1, axis=1, mode="constant")
    for step in range(1, lines + 1):
        np.maximum(largest, _shifted(across, step, 0), out=largest)
        np.maximum(largest, _shifted(across, -step, 0), out=largest)
    return np.asarray(largest)


def _shifted(values: NDArray[Any], step: int, axis: int) -> NDArray[Any]:
    """values moved by some steps along one axis, zero where nothing comes from."""
    out = np.zeros_like(values)
    n = values.shape[axis]
    if abs(step) >= n:
        return out
    to, source = (
        (slice(step, None), slice(None, n - step)) if step > 0 else (slice(None, step), slice(-step, None))
    )
    if axis == 0:
        out[to] = values[source]
    else:
        out[:, to] = values[:, source]
    return out


def _has_kin(power: NDArray[Any], mask: NDArray[np.bool_], at: NDArray[Any]) -> bool:
    """Whether the mirrored position, or a measured line nearer to the centre on the same ray, holds a like power."""
    centre = np.array(mask.shape) // 2
    row, column = (int(n) for n in at - centre)
    limit = float(power[at[0], at[1]]) / FACTOR
    if _largest(power, centre[0] - row, centre[1] - column, KIN) > limit:
        return True
    inner = np.flatnonzero(mask.any(axis=1)) - centre[0]
    inner = inner[(inner * row > 0) & (np.abs(inner) < abs(row))]
    nearest = sorted((int(line) for line in inner), key=abs)[-LINES:]
    return any(
        _largest(power, centre[0] + line, centre[1] + round(column * line / row), 0) > limit
        for line in nearest
    )


def _largest(power: NDArray[Any], row: int, column: int, rows: int) -> float:
    """Largest power within some rows and `KIN` columns of a position, zero beyond the matrix."""
    part = power[max(row - rows, 0) : max(row + rows + 1, 0), max(column - KIN, 0) : max(column + KIN + 1, 0)]
    return float(part.max()) if part.size else 0.0
