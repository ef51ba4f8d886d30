"""Adaptive coil maps from local covariance (Walsh, Gmitro & Marcellin 2000), with white noise.

At each pixel S(r) is the dominant eigenvector of R(r) = sum over a window about r of m(r') m(r')^H, m being the
low-resolution coil images.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter

from recon.coils.eigenvector import normalised
from recon.coils.grids import interpolate_directions
from recon.coils.low_resolution import equal_blocks, low_resolution_images

#: side of the averaging window, in pixels of the low-resolution grid.
WINDOW: Final = 5


def adaptive_maps(
    blocks: list[NDArray[Any]], shape: tuple[int, int], reference: NDArray[Any]
) -> NDArray[np.complex64]:
    """Coil maps of one slice, sum_c |S_c|^2 = 1 at every pixel.

    Parameters
    ----------
    blocks : list of complex (coil, rows, columns)
        Whitened calibration k-space; frames and contrasts of the slice share one set of maps.
    shape : (rows, columns)
    reference : complex (coil)
        Direction whose projection is made real and positive: it fixes the phase.

    Returns
    -------
    complex64 (coil, rows, columns)
    """
    covariance = sum(_outer(low_resolution_images(block)) for block in equal_blocks(blocks))
    assert isinstance(covariance, np.ndarray)
    window = (0, 0, WINDOW, WINDOW)
    local = uniform_filter(covariance.real, window, mode="wrap") + 1j * uniform_filter(
        covariance.imag, window, mode="wrap"
    )
    _, vectors = np.linalg.eigh(local.transpose(2, 3, 0, 1))
    vector = vectors[..., -1]
    phase = np.exp(-1j * np.angle(vector @ reference.conj()))
    coarse = (vector * phase[..., np.newaxis]).transpose(2, 0, 1)
    return normalised(interpolate_directions(coarse, shape, reference), np.ones(shape, np.bool_))


def _outer(images: NDArray[Any]) -> NDArray[Any]:
    return np.asarray(np.einsum("crs,drs->cdrs", images, images.conj()))
