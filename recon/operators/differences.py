"""Forward differences, the operator inside total variation."""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.operators.base import LinearOperator


class Differences(LinearOperator):
    """D x = (x[i+1, j] - x[i, j], x[i, j+1] - x[i, j]), zero across the border; range shape (2, rows, columns).

    ||D||^2 is below `BOUND` (4 for each axis), the usual step-size bound (Chambolle 2004).
    """

    BOUND: Final = 8.0

    def __init__(self, shape: tuple[int, int]) -> None:
        self.domain_shape = shape
        self.range_shape = (2, *shape)

    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """Differences of an image."""
        out = np.empty(self.range_shape, x.dtype)
        np.subtract(x[1:], x[:-1], out=out[0, :-1])
        np.subtract(x[:, 1:], x[:, :-1], out=out[1, :, :-1])
        out[0, -1] = 0
        out[1, :, -1] = 0
        return out

    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """Negative divergence of a field."""
        out = np.zeros(self.domain_shape, y.dtype)
        out[:-1] -= y[0, :-1]
        out[1:] += y[0, :-1]
        out[:, :-1] -= y[1, :, :-1]
        out[:, 1:] += y[1, :, :-1]
        return out
