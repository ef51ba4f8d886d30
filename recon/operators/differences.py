"""Forward differences, the operator inside total variation."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.operators.base import LinearOperator


class Differences(LinearOperator):
    """D x: forward differences along each axis, zero across the border, times that axis's weight.

    Range shape (axes, *shape). ||D||^2 is below `bound`: 4 times the squared weight of each axis longer than one
    (Chambolle 2004).

    Parameters
    ----------
    shape : tuple of int
    weights : tuple of float, optional
        One for each axis; 1 by default.
    """

    def __init__(self, shape: tuple[int, ...], weights: tuple[float, ...] | None = None) -> None:
        self.domain_shape = shape
        self.range_shape = (len(shape), *shape)
        self.weights = weights or (1.0,) * len(shape)

    @property
    def bound(self) -> float:
        """Upper bound of ||D||^2."""
        return 4 * sum(weight**2 for weight, n in zip(self.weights, self.domain_shape, strict=True) if n > 1)

    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """Differences of an image."""
        out = np.zeros(self.range_shape, x.dtype)
        for axis, weight in enumerate(self.weights):
            source, target = np.moveaxis(x, axis, 0), np.moveaxis(out[axis], axis, 0)
            target[:-1] = source[1:] - source[:-1]
            target *= x.real.dtype.type(weight)
        return out

    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """Negative divergence of a field."""
        out = np.zeros(self.domain_shape, y.dtype)
        for axis, weight in enumerate(self.weights):
            source, target = np.moveaxis(y[axis], axis, 0), np.moveaxis(out, axis, 0)
            scaled = source[:-1] * y.real.dtype.type(weight)
            target[:-1] -= scaled
            target[1:] += scaled
        return out
