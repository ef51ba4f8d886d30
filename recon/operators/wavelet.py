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

from recon import kernels
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

    def filters(self, dtype: Any) -> tuple[NDArray[Any], NDArray[Any]]:
        """Analysis filters (low, high) in the real precision of a complex dtype."""
        real = np.zeros(0, dtype).real.dtype
        return np.array(self._wavelet.dec_lo, real), np.array(self._wavelet.dec_hi, real)

    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """Coefficients of a padded image, approximation in the leading corner."""
        out = np.array(x, order="C")
        kernels.analyse(out.view(out.real.dtype)[np.newaxis], *self.filters(out.dtype), self.levels)
        return out

    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """Padded image of coefficients: the transform is orthogonal, so the adjoint is the inverse."""
        out = np.array(y, order="C")
        kernels.synthesise(out.view(out.real.dtype)[np.newaxis], *self.filters(out.dtype), self.levels)
        return out
