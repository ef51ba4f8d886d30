"""The measurement of an object that exceeds the field of view and folds onto itself.

    E u = w P F sum_j S_cj u_j,  c = 1 ... C,  j = 1, 2

with two sets of maps and an image for each (Uecker et al. 2014). To the solver u is a series of two images: its
penalties act on each alone.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.operators.encoding import Encoding
from recon.operators.fourier import inverse_transform, transform


class FoldedEncoding(Encoding):
    """E for one plane with several sets of maps.

    Parameters
    ----------
    maps : complex (set, coil, rows, columns)
        Whitened coil maps in noise units. Where all maps of a set are zero, its image is measured once as zero.
    mask : bool (rows, columns)
    weights : float (rows, columns), optional
        As for `Encoding`.
    """

    def __init__(
        self, maps: NDArray[Any], mask: NDArray[np.bool_], weights: NDArray[Any] | None = None
    ) -> None:
        super().__init__(maps[0], mask, weights=weights)
        self.sets = np.ascontiguousarray(maps)
        self.domain_shape = (len(maps), *mask.shape)
        outside = ~np.any(maps != 0, axis=1)
        self._outside = outside.astype(maps.real.dtype) if outside.any() else None

    def power(self) -> NDArray[Any]:
        """sum_c |S_cj|^2 for each set."""
        return np.asarray(np.sum(np.abs(self.sets) ** 2, axis=1))

    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """An image for each set to sampled data, zero where not sampled."""
        images = np.sum(self.sets * x[:, np.newaxis], axis=0)
        return np.asarray(transform(images, self.axes) * self.weight)

    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """Sampled data to an image for each set."""
        out = np.zeros(self.domain_shape, y.dtype)
        for coil, samples in enumerate(y):
            image = inverse_transform(samples * self.weight, self.axes)
            out += self.sets[:, coil].conj() * image
        return out

    def normal(self, x: NDArray[Any]) -> NDArray[Any]:
        """E^H E x plus x outside each set's maps, with one pair of transforms for each coil."""
        out = np.zeros_like(x) if self._outside is None else self._outside * x
        for coil in range(self.sets.shape[1]):
            maps = self.sets[:, coil]
            spectrum = scipy.fft.fftn(np.sum(maps * x, axis=0), axes=self.axes, overwrite_x=True)
            spectrum *= self._plain_mask[0]  # holds the inverse transform's scale too
            image = scipy.fft.ifftn(spectrum, axes=self.axes, norm="forward", overwrite_x=True)
            out += maps.conj() * image
        return out

    def squared_norm_bound(self) -> float:
        """Upper bound of ||E||^2: the largest eigenvalue of S^H S, (set, set), at any pixel, times the largest w^2."""
        grams = np.einsum("jcyx,kcyx->yxjk", self.sets.conj(), self.sets)
        largest = float(np.linalg.norm(grams, 2, axis=(-2, -1)).max()) * float(np.max(self.weight)) ** 2
        return largest if self._outside is None else max(largest, 1.0)
