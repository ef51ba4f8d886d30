"""Low-resolution coil images of a calibration block, and where they show the object."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.coils.calibration import crop_block
from recon.operators.fourier import inverse_transform

#: the low-resolution grid is this many times the calibration block.
GRID_FACTOR: Final = 2
#: mean square of a two-dimensional Hann window, (3/8)^2.
HANN_POWER: Final = 9 / 64


def low_resolution_images(block: NDArray[Any]) -> NDArray[Any]:
    """Coil images of a calibration block (coil, rows, columns), Hann-weighted against ringing, twice as many pixels."""
    _, rows, columns = block.shape
    window = np.outer(np.hanning(rows + 2)[1:-1], np.hanning(columns + 2)[1:-1])
    padded = np.zeros((block.shape[0], GRID_FACTOR * rows, GRID_FACTOR * columns), np.complex64)
    first = tuple(
        large // 2 - small // 2 for large, small in zip(padded.shape[1:], (rows, columns), strict=True)
    )
    padded[:, first[0] : first[0] + rows, first[1] : first[1] + columns] = block * window
    return inverse_transform(padded)


def equal_blocks(blocks: Sequence[NDArray[Any]]) -> list[NDArray[Any]]:
    """The blocks cropped to the rows and columns that all of them have."""
    rows, columns = (min(block.shape[axis] for block in blocks) for axis in (1, 2))
    return [crop_block(block, rows, columns) for block in blocks]


def object_pixels(
    blocks: Sequence[NDArray[Any]], level: float, *, has_noise_units: bool, largest: float = 0.0
) -> NDArray[np.bool_]:
    """Pixels that hold an object: above a fraction of the largest magnitude, and well above the noise.

    Parameters
    ----------
    blocks : sequence of complex (coil, rows, columns)
        Whitened calibration k-space of planes that show the same object.
    level : float
        Of the largest magnitude (root of the sum over coils and blocks of the squares).
    has_noise_units : bool
        Whether the noise variance is one.
    largest : float
        Power (square of the magnitude, of one block) that counts as the largest where these planes hold less.

    Returns
    -------
    bool (low-resolution rows, columns)
    """
    equal = equal_blocks(blocks)
    power = sum(
        np.sum(np.abs(low_resolution_images(block)) ** 2, axis=0, dtype=np.float64) for block in equal
    )
    assert isinstance(power, np.ndarray)
    channels = len(equal) * len(equal[0])
    # a Hann-weighted block spreads unit noise over a grid of more pixels than it has samples
    noise = channels * HANN_POWER * equal[0][0].size / power.size if has_noise_units else 0.0
    # the sum over C channels of noise alone has a standard deviation of 1/sqrt(C) of its mean
    limit = max(noise * (1 + 4 / np.sqrt(channels)), level**2 * max(float(power.max()), largest * len(equal)))
    return np.asarray(power > limit)
