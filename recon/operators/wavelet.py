"""Orthogonal wavelet transform on images of any size (the only module that imports pywt).

PyWavelets' periodization is orthogonal only where 2^levels divides the size, so an image is embedded in the next
larger size that fits. The image itself is never zero-padded: the solver treats the margin as unknowns that cost
nothing in the data term (see `recon.solver`), so the margin takes whatever continuation is sparsest.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
import pywt
from numpy.typing import NDArray

from recon.operators.base import LinearOperator

MOST_LEVELS: Final = 4


class Wavelet(LinearOperator):
    """W x: periodized 2-D wavelet coefficients in one array of the padded shape; W^H W = W W^H = I.

    Parameters
    ----------
    shape : (rows, columns)
        Image size; `domain_shape` is this rounded up to a multiple of 2^levels.
    name : str
        An orthogonal wavelet (Daubechies 1992).
    """

    def __init__(self, shape: tuple[int, int], name: str) -> None:
        self._wavelet = pywt.Wavelet(name)
        self.levels = max(0, min(MOST_LEVELS, *(pywt.dwt_max_level(n, self._wavelet) for n in shape)))
        step = 2**self.levels
        self.domain_shape = tuple(-(-n // step) * step for n in shape)
        self.range_shape = self.domain_shape

    @property
    def approximation_shape(self) -> tuple[int, ...]:
        """Size of the corner block that holds the approximation coefficients, which are not penalised."""
        return tuple(n // 2**self.levels for n in self.domain_shape)

    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """Coefficients of a padded image, approximation in the leading corner."""
        out = np.array(x)
        for level in range(self.levels):
            rows, columns = (n >> level for n in self.domain_shape)
            block = out[:rows, :columns]
            low, high = pywt.dwt(block, self._wavelet, "periodization", axis=0)
            half = rows // 2
            for part, at in ((low, slice(0, half)), (high, slice(half, rows))):
                block[at, : columns // 2], block[at, columns // 2 :] = pywt.dwt(
                    part, self._wavelet, "periodization", axis=1
                )
        return out

    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """Padded image of coefficients: the transform is orthogonal, so the adjoint is the inverse."""
        out = np.array(y)
        for level in reversed(range(self.levels)):
            rows, columns = (n >> level for n in self.domain_shape)
            block = out[:rows, :columns]
            half = rows // 2
            low, high = (
                pywt.idwt(
                    block[at, : columns // 2],
                    block[at, columns // 2 :],
                    self._wavelet,
                    "periodization",
                    axis=1,
                )
                for at in (slice(0, half), slice(half, rows))
            )
            block[...] = pywt.idwt(low, high, self._wavelet, "periodization", axis=0)
        return out
