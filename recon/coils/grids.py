"""Values on grids over the same field of view: from coarse to fine and back; centres n // 2 coincide, ends wrap."""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

#: neighbours whose vectors agree less than this (cosine, phase included) are brought into phase before interpolating.
SMALLEST_AGREEMENT: Final = 0.7


def nearest(fine: NDArray[Any], shape: tuple[int, ...]) -> NDArray[Any]:
    """Values of a plane at the nearest points of a coarser grid over the same field of view; centres n//2 coincide."""
    at = [
        np.clip(np.rint((np.arange(n) - n // 2) * (m / n)).astype(int) + m // 2, 0, m - 1)
        for n, m in zip(shape, fine.shape, strict=True)
    ]
    return np.asarray(fine[np.ix_(*at)])


def interpolate(coarse: NDArray[Any], shape: tuple[int, int]) -> NDArray[Any]:
    """Linear interpolation from a grid over the field of view to a finer one."""
    out = coarse
    for axis, n in zip((-2, -1), shape, strict=True):
        m = out.shape[axis]
        if m == n:
            continue
        at = (np.arange(n) - n // 2) * (m / n) + m // 2
        low = np.floor(at).astype(int)
        weight = (at - low).reshape((-1, 1) if axis == -2 else (-1,))
        out = (
            np.take(out, low % m, axis=axis) * (1 - weight) + np.take(out, (low + 1) % m, axis=axis) * weight
        )
    return out


def interpolate_directions(
    coarse: NDArray[Any], shape: tuple[int, int], reference: NDArray[Any]
) -> NDArray[Any]:
    """Linear interpolation of vectors of which only the direction is known, their phases given by a reference.

    About a zero of the projection on the reference the phases of neighbours have nothing to do with each other, and
    their mean would be no direction between them. There the neighbours are first brought into the phase of the nearest.

    Parameters
    ----------
    coarse : complex (coil, rows, columns)
        Unit vectors whose projection on the reference is real and positive.
    shape : (rows, columns)
        Of the finer grid.
    reference : complex (coil)

    Returns
    -------
    complex (coil, rows, columns)
        Not normalised; of the same phase.
    """
    out = interpolate(coarse, shape)
    if coarse.shape[1:] == shape:
        return out
    beside = [np.roll(coarse, step, axis=(1, 2)) for step in ((0, -1), (-1, 0), (-1, -1))]
    agreement = np.min([np.sum(coarse.conj() * other, axis=0).real for other in beside], axis=0)
    places = [
        (np.arange(n) - n // 2) * (m / n) + m // 2 for n, m in zip(shape, coarse.shape[1:], strict=True)
    ]
    low = [np.floor(at).astype(int) for at in places]
    cells = [first % m for first, m in zip(low, coarse.shape[1:], strict=True)]
    rows, columns = np.nonzero(agreement[np.ix_(*cells)] < SMALLEST_AGREEMENT)
    if rows.size == 0:
        return out
    down, right = (places[0] - low[0])[rows], (places[1] - low[1])[columns]
    weights = [(1 - down) * (1 - right), (1 - down) * right, down * (1 - right), down * right]
    corners = [coarse, *beside]
    around = np.stack([corner[:, cells[0][rows], cells[1][columns]] for corner in corners])
    nearest_corner = np.argmax(weights, axis=0)
    anchor = around[nearest_corner, :, np.arange(rows.size)].T
    overlap = np.sum(around.conj() * anchor, axis=1)
    turned = np.stack(weights) * np.exp(1j * np.angle(overlap))
    mixed = np.sum(turned[:, np.newaxis] * around, axis=0)
    phase = np.exp(-1j * np.angle(reference.conj() @ mixed))
    out[:, rows, columns] = mixed * phase
    return out
