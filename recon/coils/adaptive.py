"""Adaptive coil maps from local covariance (Walsh, Gmitro & Marcellin 2000), with white noise.

At each pixel S(r) is the dominant eigenvector of R(r) = sum over a window about r of m(r') m(r')^H, m being coil
images: low-resolution ones of a calibration region, or the images themselves that are to be combined.
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
#: of full images: half the window without its centre, and the distance of the places where the covariance is taken.
HALF_WINDOW: Final = 4
SPACING: Final = 4


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


def adaptive_directions(images: NDArray[Any], reference: NDArray[Any]) -> NDArray[np.complex64]:
    """Dominant eigenvector of the coil images' own local covariance at every pixel, sum_c |v_c|^2 = 1.

    The covariance is taken on a coarser grid and its eigenvectors are interpolated, as in the paper.

    Parameters
    ----------
    images : complex (coil, rows, columns)
        Whitened.
    reference : complex (coil)
        Direction whose projection is made real and positive: it fixes the phase.
    """
    rows, columns = images.shape[1:]
    coarse = max(1, rows // SPACING), max(1, columns // SPACING)
    around = [_neighbourhoods(n, m) for n, m in zip((rows, columns), coarse, strict=True)]
    vectors = np.empty((*coarse, len(images)), np.complex128)
    for row, lines in enumerate(around[0]):
        patches = images[:, lines][:, :, around[1]].transpose(2, 0, 1, 3).reshape(coarse[1], len(images), -1)
        _, found = np.linalg.eigh(patches @ patches.conj().transpose(0, 2, 1))
        vectors[row] = found[..., -1]
    vectors *= np.exp(-1j * np.angle(vectors @ reference.conj()))[..., np.newaxis]
    fine = interpolate_directions(vectors.transpose(2, 0, 1), (rows, columns), reference)
    return normalised(fine, np.ones((rows, columns), np.bool_))


def _neighbourhoods(n: int, m: int) -> NDArray[np.intp]:
    """Pixels about each of m places on a line of n, (m, window); ends wrap as they do in the image."""
    places = np.rint((np.arange(m) - m // 2) * (n / m)).astype(np.intp) + n // 2
    half = min(HALF_WINDOW, (n - 1) // 2)
    return np.asarray((places[:, np.newaxis] + np.arange(-half, half + 1)) % n)
