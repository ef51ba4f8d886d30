"""Adaptive coil maps from local covariance (Walsh, Gmitro & Marcellin 2000), with white noise.

At each pixel S(r) is the dominant eigenvector of R(r) = sum over a window about r of m(r') m(r')^H, m being the
low-resolution coil images.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter

from recon.coils.calibration import crop_block
from recon.coils.eigenvector import interpolate, normalised
from recon.operators.fourier import inverse_transform

#: side of the averaging window, in pixels of the low-resolution grid.
WINDOW: Final = 5
#: the low-resolution grid is this many times the calibration block.
GRID_FACTOR: Final = 2


def low_resolution_images(block: NDArray[Any]) -> NDArray[Any]:
    """Coil images of a calibration block (coil, rows, columns), Hann-weighted against ringing, twice as many pixels."""
    _, rows, columns = block.shape
    window = np.outer(np.hanning(rows + 2)[1:-1], np.hanning(columns + 2)[1:-1])
    padded = np.zeros((block.shape[0], GRID_FACTOR * rows, GRID_FACTOR * columns), np.complex64)
    crop = crop_block(padded, rows, columns)
    first = tuple(
        large // 2 - small // 2 for large, small in zip(padded.shape[1:], crop.shape[1:], strict=True)
    )
    padded[:, first[0] : first[0] + rows, first[1] : first[1] + columns] = block * window
    return inverse_transform(padded)


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
    rows, columns = (min(block.shape[axis] for block in blocks) for axis in (1, 2))
    covariance = sum(_outer(low_resolution_images(crop_block(block, rows, columns))) for block in blocks)
    assert isinstance(covariance, np.ndarray)
    window = (0, 0, WINDOW, WINDOW)
    local = uniform_filter(covariance.real, window, mode="wrap") + 1j * uniform_filter(
        covariance.imag, window, mode="wrap"
    )
    _, vectors = np.linalg.eigh(local.transpose(2, 3, 0, 1))
    vector = vectors[..., -1]
    phase = np.exp(-1j * np.angle(vector @ reference.conj()))
    coarse = (vector * phase[..., np.newaxis]).transpose(2, 0, 1)
    return normalised(interpolate(coarse, shape), np.ones(shape, np.bool_))


def _outer(images: NDArray[Any]) -> NDArray[Any]:
    return np.asarray(np.einsum("crs,drs->cdrs", images, images.conj()))
