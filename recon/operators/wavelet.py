"""Orthogonal wavelet transform on planes and volumes of any size (the only module that imports pywt).

PyWavelets' periodization is orthogonal only where 2^levels divides the size, so an image is embedded in the next
larger size that fits. The image itself is never zero-padded: the solver treats the margin as unknowns that cost
nothing in the data term (see `recon.solver`), so the margin takes whatever continuation is sparsest.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
import pywt
from numpy.typing import NDArray

from recon.compiled import as_slabs
from recon.operators import filters
from recon.operators.base import LinearOperator

MOST_LEVELS: Final = 4


class Wavelet(LinearOperator):
    """W x: periodized wavelet coefficients in one array of the padded shape; W^H W = W W^H = I.

    Parameters
    ----------
    shape : (rows, columns) or (slabs, rows, columns)
        Image size; `domain_shape` is this rounded up to multiples of 2^levels along the transformed axes.
    name : str
        An orthogonal wavelet (Daubechies 1992).
    along_slabs : bool
        Whether the slab axis is transformed too (a volume) or its planes one by one (a series).

    Attributes
    ----------
    levels, slab_levels : int
        How often rows and columns, and slabs, are halved.
    """

    def __init__(self, shape: tuple[int, ...], name: str, *, along_slabs: bool = False) -> None:
        self._wavelet = pywt.Wavelet(name)
        self.levels = max(0, min(MOST_LEVELS, *(pywt.dwt_max_level(n, self._wavelet) for n in shape[-2:])))
        has_slabs = along_slabs and len(shape) == 3
        self.slab_levels = min(self.levels, pywt.dwt_max_level(shape[0], self._wavelet)) if has_slabs else 0
        steps = (2**self.slab_levels, 2**self.levels, 2**self.levels)[-len(shape) :]
        self.domain_shape = tuple(-(-n // step) * step for n, step in zip(shape, steps, strict=True))
        self.range_shape = self.domain_shape

    @property
    def approximation_shape(self) -> tuple[int, ...]:
        """Size of the corner block that holds the approximation coefficients, which are not penalised."""
        halvings = (self.slab_levels, self.levels, self.levels)[-len(self.domain_shape) :]
        return tuple(n >> count for n, count in zip(self.domain_shape, halvings, strict=True))

    def filters(self, dtype: Any) -> tuple[NDArray[Any], NDArray[Any]]:
        """Analysis filters (low, high) in the real precision of a complex dtype."""
        real = np.zeros(0, dtype).real.dtype
        return np.array(self._wavelet.dec_lo, real), np.array(self._wavelet.dec_hi, real)

    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """Coefficients of a padded image, approximation in the leading corner."""
        out = np.array(x, order="C")
        self.analyse(out)
        return out

    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """Padded image of coefficients: the transform is orthogonal, so the adjoint is the inverse."""
        out = np.array(y, order="C")
        self.synthesise(out)
        return out

    def analyse(self, x: NDArray[Any]) -> None:
        """`forward` in place."""
        filters.analyse(as_slabs(x), *self.filters(x.dtype), self.levels, self.slab_levels)

    def synthesise(self, y: NDArray[Any]) -> None:
        """`adjoint` in place."""
        filters.synthesise(as_slabs(y), *self.filters(y.dtype), self.levels, self.slab_levels)
