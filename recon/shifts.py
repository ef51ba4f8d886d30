"""Cycle spinning inside the objective: wavelet terms of a fixed set of circular shifts.

    lambda_w / S  sum_s ||W T_s u~||_1 (details)

One transform prefers edges on its own grid; the mean over shifts prefers none (Coifman & Donoho 1995). Only one of the
terms has a proximal map that goes with the others, so each of the rest has a dual field of coefficients q_s with
|q_s| <= lambda_w / S, zero where a coefficient is not penalised.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon import kernels
from recon.compiled import as_slabs
from recon.operators.wavelet import Wavelet

#: shifts move the grid of every level: multiples of an odd number near a third of the coarsest step.
_STRIDE: Final = 5


def shift_set(transform: Wavelet, count: int) -> list[tuple[int, ...]]:
    """The first `count` shifts along all transformed axes, from (0, 0) on; at most 2^levels differ."""
    halvings = (transform.slab_levels, transform.levels, transform.levels)[-len(transform.domain_shape) :]
    distinct = min(count, 2**transform.levels)
    return [tuple(_STRIDE * k % 2**levels for levels in halvings) for k in range(distinct)]


class ShiftedWavelets:
    """Dual fields of ||W T_s u~||_1 for some shifts, and their sum back in the image.

    Parameters
    ----------
    transform : Wavelet
    shifts : list of tuple
    radius : float
        lambda_w / S.
    frames : bool
        Whether each slab has an approximation of its own (a series).
    dtype : complex dtype
    known : complex ndarray (shift, *padded), optional
        Fields to start from.
    """

    def __init__(
        self,
        transform: Wavelet,
        shifts: list[tuple[int, ...]],
        radius: float,
        *,
        frames: bool,
        dtype: Any,
        known: NDArray[Any] | None = None,
    ) -> None:
        self.transform, self.shifts, self.radius = transform, shifts, radius
        self.axes = tuple(range(len(transform.domain_shape)))
        shape = transform.domain_shape
        slabs, rows, columns = (1, *transform.approximation_shape)[-3:]
        self.corner = (shape[0] if frames and len(shape) == 3 else slabs, rows, columns)
        expected = (len(shifts), *shape)
        if known is not None and known.shape == expected:
            self.fields = known
        else:
            self.fields = np.zeros(expected, dtype)
        self.sum = np.zeros(shape, dtype)
        if known is not None:
            self._collect()

    def ascend(self, x: NDArray[Any], step: float, factor: float = 1.0) -> None:
        """q_s = projection of q_s + step W T_s x onto its ball, whose radius is `factor` times the penalty's."""
        real = x.real.dtype.type
        for field, shift in zip(self.fields, self.shifts, strict=True):
            coefficients = self._forward(x, shift)
            kernels.ascend_coefficients(
                as_slabs(field), as_slabs(coefficients), real(step), real(self.radius * factor), self.corner
            )
        self._collect()

    def sums(self, x: NDArray[Any]) -> tuple[float, float]:
        """The terms' value radius sum_s ||W T_s x||_1, and sum_s Re <q_s, W T_s x>."""
        size, product = 0.0, 0.0
        for field, shift in zip(self.fields, self.shifts, strict=True):
            length, dot = kernels.coefficient_sums(
                as_slabs(field), as_slabs(self._forward(x, shift)), self.corner
            )
            size, product = size + length, product + dot
        return self.radius * size, product

    def _forward(self, x: NDArray[Any], shift: tuple[int, ...]) -> NDArray[Any]:
        out = np.roll(x, shift, self.axes) if any(shift) else x.copy()
        self.transform.analyse(out)
        return out

    def _collect(self) -> None:
        """sum_s T_s^H W^H q_s."""
        self.sum[...] = 0
        for field, shift in zip(self.fields, self.shifts, strict=True):
            back = tuple(-k for k in shift)
            image = field.copy()
            self.transform.synthesise(image)
            self.sum += np.roll(image, back, self.axes) if any(shift) else image
