"""Which measured samples are kept out of a solve, to be predicted by it: like the mask itself, outside calibration."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from recon.coils.calibration import central_block
from recon.scan import readout_pattern


def held_out_samples(
    mask: NDArray[np.bool_], fraction: float, rng: np.random.Generator, *, fewest: int = 1
) -> NDArray[np.bool_]:
    """Choose measured positions to be kept out.

    Whole lines where the mask consists of whole readouts, else single positions. Candidates lie outside the fully
    sampled centre, which the coil maps were computed from. They are taken in their order, one at random out of each of
    as many equal strata as are wanted, so that what is kept out is spread like what was measured.

    Parameters
    ----------
    mask : bool (rows, columns)
    fraction : float
        Part of the candidates, between 0 and 1.
    rng : numpy.random.Generator
    fewest : int
        Fewer than so many are not worth keeping out: then there are none.

    Returns
    -------
    bool (rows, columns)
        A part of `mask`, empty where there are too few candidates.
    """
    is_lines = bool((mask == readout_pattern(mask)).all())
    rows, columns = central_block(mask)
    candidates: NDArray[np.bool_] = np.any(mask, axis=1) if is_lines else mask.copy()
    top = mask.shape[0] // 2 - rows // 2
    if is_lines:
        candidates[top : top + rows] = False
    else:
        left = mask.shape[1] // 2 - columns // 2
        candidates[top : top + rows, left : left + columns] = False
    places = np.flatnonzero(candidates)
    count = round(fraction * len(places))
    # what is left must still say something about the outer parts of k-space
    count = min(max(count, fewest), len(places) // 2)
    held = np.zeros(candidates.size, np.bool_)
    if count >= fewest and count > 0:
        held[places[_one_of_each_stratum(len(places), count, rng)]] = True
    shaped = held.reshape(candidates.shape)
    return np.asarray(mask & (shaped[:, np.newaxis] if is_lines else shaped))


def held_out_of_frames(
    masks: list[NDArray[np.bool_]], fraction: float, rng: np.random.Generator, *, fewest: int = 1
) -> list[NDArray[np.bool_]]:
    """Choose measured positions to be kept out of each frame of a series, see `held_out_samples`.

    Frames that all measure the same positions lose the same ones: else each would be told by the others what the scan
    itself leaves out of all of them, and tying frames together would seem to be worth more than it is.

    Parameters
    ----------
    masks : list of bool (rows, columns)
        At least one.
    fraction, rng, fewest
        As for `held_out_samples`.

    Returns
    -------
    list of bool (rows, columns)
    """
    if all(np.array_equal(mask, masks[0]) for mask in masks[1:]):
        return [held_out_samples(masks[0], fraction, rng, fewest=fewest)] * len(masks)
    return [held_out_samples(mask, fraction, rng, fewest=fewest) for mask in masks]


def _one_of_each_stratum(places: int, count: int, rng: np.random.Generator) -> NDArray[np.intp]:
    edges = np.linspace(0, places, count + 1)
    low = np.ceil(edges[:-1]).astype(np.intp)
    high = np.maximum(np.ceil(edges[1:]).astype(np.intp), low + 1)
    return np.minimum(low + (rng.random(count) * (high - low)).astype(np.intp), places - 1)
