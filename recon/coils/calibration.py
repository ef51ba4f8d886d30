"""Where the calibration data are: the fully sampled block about the centre of k-space, or `/reference`."""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.errors import CalibrationMissing
from recon.operators.fourier import crop_centre

#: side of the largest block used for maps; a larger one adds time, not accuracy.
LARGEST_BLOCK: Final = 32
#: smallest side that maps can be computed from (sides shorter than this only where the matrix itself is).
SMALLEST_BLOCK: Final = 8


def central_block(mask: NDArray[np.bool_]) -> tuple[int, int]:
    """Rows and columns of the largest fully sampled rectangle that contains DC and is centred on it.

    Centred means that index n//2 of the matrix becomes index size//2 of the block.

    Parameters
    ----------
    mask : bool (rows, columns)

    Returns
    -------
    (rows, columns), both 0 where DC itself is not sampled.
    """
    rows = mask.shape[0]
    best = (0, 0)
    for height in range(1, rows + 1):
        start = rows // 2 - height // 2
        width = _centred_run(np.asarray(mask[start : start + height].all(axis=0)))
        if width == 0:
            break
        # the shorter side limits the maps' resolution, so it counts twice
        if min(height, width) * height * width > min(best) * best[0] * best[1]:
            best = (height, width)
    return best


def _centred_run(line: NDArray[np.bool_]) -> int:
    """Length of the longest run of True that is centred on index n//2."""
    n = len(line)
    below = line[: n // 2][::-1]
    above = line[n // 2 :]
    low = len(below) if below.all() else int(np.argmin(below))
    high = len(above) if above.all() else int(np.argmin(above))
    # a run of size s covers s//2 entries below the centre and s - s//2 from the centre on
    return max(0, min(2 * low + 1, 2 * high))


def is_large_enough(rows: int, columns: int, shape: tuple[int, int]) -> bool:
    """Whether coil maps can be computed from a block, sides shorter than `SMALLEST_BLOCK` only where the matrix is."""
    return rows >= min(SMALLEST_BLOCK, shape[0]) and columns >= min(SMALLEST_BLOCK, shape[1])


def check_block(rows: int, columns: int, shape: tuple[int, int], what: str) -> None:
    """Raise `CalibrationMissing` when a block is too small to compute coil maps from."""
    if not is_large_enough(rows, columns, shape):
        needed = tuple(min(SMALLEST_BLOCK, n) for n in shape)
        raise CalibrationMissing(
            f"coil maps need a fully sampled centre of k-space of at least {needed[0]} x {needed[1]}; {what} has "
            f"{rows} x {columns}: sample a calibration region, add /reference, or supply maps as /sensitivity"
        )


def prefers_time_average(single: tuple[int, int], average: tuple[int, int]) -> bool:
    """Whether the mean over the frames serves maps better than single frames: when its centre is the larger one.

    Parameters
    ----------
    single, average : (rows, columns)
        Fully sampled centre of the worst frame, and of the mean.
    """
    sides = [tuple(min(LARGEST_BLOCK, n) for n in block) for block in (single, average)]
    return sides[1][0] * sides[1][1] > sides[0][0] * sides[0][1]


def crop_block(kspace: NDArray[Any], rows: int, columns: int) -> NDArray[Any]:
    """The central rows and columns of (coil, rows, columns)."""
    return crop_centre(crop_centre(kspace, rows, axis=-2), columns, axis=-1)
