"""Repeated measurements of one plane, combined.

    y(k) = 1/n(k) sum_a y_a(k),   noise variance Psi / n(k)

over the averages a that measured position k. The whitener is that of the mean count nbar (Psi / nbar), so that noise
units fit a scan whatever its number of averages, and where counts differ the data term weighs each position by
sqrt(n / nbar): its noise then has unit variance again.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray


class Samples(NamedTuple):
    """What a plane's averages say together.

    Attributes
    ----------
    kspace : complex64 (coil, rows, columns)
        Mean of the samples at each position, zero where there are none.
    counts : int (rows, columns)
        Samples behind each position.
    """

    kspace: NDArray[np.complex64]
    counts: NDArray[np.int64]

    @property
    def mask(self) -> NDArray[np.bool_]:
        """Positions measured at least once."""
        return np.asarray(self.counts > 0)


class Mean:
    """Takes in averages one by one, so that memory does not grow with their number."""

    def __init__(self) -> None:
        self._sum: NDArray[np.complex64] | None = None
        self._counts: NDArray[np.int64] | None = None

    def add(self, kspace: NDArray[np.complex64], mask: NDArray[np.bool_]) -> None:
        """Take in one average: complex64 (coil, rows, columns) and bool (rows, columns)."""
        if self._sum is None or self._counts is None:
            self._sum, self._counts = kspace * mask, mask.astype(np.int64)
        else:
            self._sum += kspace * mask
            self._counts += mask

    def finish(self) -> Samples:
        """The mean of everything taken in, at least one average."""
        assert self._sum is not None
        assert self._counts is not None
        if self._counts.max(initial=0) > 1:
            self._sum /= np.maximum(self._counts, 1).astype(np.float32)
        return Samples(self._sum, self._counts)


def relative_weights(counts: NDArray[Any], mean_count: float) -> NDArray[np.float32] | None:
    """sqrt(n / nbar) at every position, zero where n is; None where that is one at all sampled positions.

    Parameters
    ----------
    counts : int (rows, columns)
    mean_count : float
        nbar, the mean over the sampled positions of the whole scan.
    """
    if bool(((counts == mean_count) | (counts == 0)).all()):
        return None
    return np.sqrt(counts / mean_count).astype(np.float32)


def block_scale(counts: NDArray[Any]) -> float:
    """1 / sqrt(mean of 1/n) over a block's sampled positions: times it, a mean's noise has the variance of one.

    One factor for the whole block: position by position it would act as a filter on the image.
    """
    sampled = counts[counts > 0]
    return float(1 / np.sqrt(np.mean(1 / sampled))) if sampled.size else 1.0
