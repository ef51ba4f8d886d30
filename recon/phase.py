"""Low-resolution phase of an image, from the fully sampled centre of its own k-space.

    phi = angle( sum_c conj(S_c) F^-1 (H y_c) )

H being a Hann window over the largest fully sampled block that is centred on DC (McGibney et al. 1993; Noll, Nishimura
& Macovski 1991). Taken out of the image, it leaves an image that is real as far as the phase is smooth: what
partial Fourier, and the constraints `real` and `nonnegative`, rely on.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.coils.calibration import central_block
from recon.errors import InvalidScan
from recon.operators.encoding import Encoding
from recon.operators.fourier import inverse_transform, transform

#: the shortest side of the block that tells the phase (sides shorter than this only where the matrix itself is).
SHORTEST_SIDE: Final = 8


def remove_phase(encoding: Encoding, data: NDArray[Any]) -> Encoding:
    """E' = E diag(e^{i phi}), with phi of each plane, frame or volume from its own samples.

    Parameters
    ----------
    encoding : Encoding
    data : complex ndarray
        In the range of `encoding`.

    Returns
    -------
    Encoding
        Its image is v, u = e^{i phi} v.

    Raises
    ------
    InvalidScan
        Where the fully sampled centre is too small to tell the phase.
    """
    sampled = encoding.weight != 0
    if encoding.depth == "series" and sampled.ndim == 3:
        windows = np.stack([_window(frame, encoding.axes, encoding.domain_shape[1:]) for frame in sampled])
    else:
        windows = _window(sampled, encoding.axes, encoding.domain_shape)
    size = encoding.weight.dtype.type
    inverse = np.divide(1, encoding.weight, out=np.zeros_like(encoding.weight), where=sampled)
    image = np.zeros(encoding.domain_shape, encoding.maps.dtype)
    axes = tuple(range(-windows.ndim, 0)) if encoding.depth == "volume" else (-2, -1)
    for map_, samples in zip(encoding.maps, data, strict=True):
        kspace = samples * inverse
        if -1 not in encoding.axes:  # columns are in image space
            kspace = transform(kspace, (-1,))
        image += map_.conj() * inverse_transform(kspace * windows.astype(size), axes)
    magnitude = np.abs(image)
    phase = np.divide(image, magnitude, out=np.ones_like(image), where=magnitude > 0)
    return encoding.absorb(phase)


def _window(sampled: NDArray[np.bool_], axes: tuple[int, ...], shape: tuple[int, ...]) -> NDArray[np.float64]:
    """Hann window over the centred block that was fully sampled along every transformed axis; axes from the end."""
    axes = tuple(axis for axis in axes if -axis <= len(shape))
    sides = _block(sampled, axes, shape)
    for axis in axes:
        if sides[axis] < min(SHORTEST_SIDE, shape[axis]):
            found = " x ".join(str(sides[axis]) for axis in axes)
            raise InvalidScan(
                f"the constraint needs the phase of the image, but the fully sampled centre of k-space is {found} "
                f"samples; accepted are sides of at least {SHORTEST_SIDE}: measure them, or set constraint to none"
            )
    if -1 not in axes:  # complete readouts: as wide as the block is high, so that both directions see alike
        sides[-1] = min(max(sides.values()), shape[-1])
    window = np.ones(shape)
    for axis, side in sides.items():
        n = shape[axis]
        profile = np.zeros(n)
        start = n // 2 - side // 2
        profile[start : start + side] = 1
        if side < n:
            offset = np.arange(side) - side // 2
            profile[start : start + side] = 0.5 + 0.5 * np.cos(2 * np.pi * offset / (side + 1))
        window *= profile.reshape(-1, *(1,) * (-axis - 1))
    return window


def _block(sampled: NDArray[np.bool_], axes: tuple[int, ...], shape: tuple[int, ...]) -> dict[int, int]:
    """Sides of a fully sampled centred block, by axis; of a volume grown in turn from DC until no side can grow."""
    if len(shape) == 2:  # the calibration block, so that samples kept out elsewhere leave the phase as it is
        of_plane = dict(zip((-2, -1), central_block(np.broadcast_to(sampled, shape)), strict=True))
        return {axis: of_plane[axis] for axis in axes}
    full = np.broadcast_to(sampled, shape) if sampled.shape[-1] > 1 else sampled
    sides = dict.fromkeys(axes, 0)

    def holds(trial: dict[int, int]) -> bool:
        block = [slice(None)] * full.ndim
        for axis, side in trial.items():
            start = full.shape[axis] // 2 - side // 2
            block[axis] = slice(start, start + side)
        return bool(full[tuple(block)].all())

    if not holds(dict.fromkeys(axes, 1)):
        return sides
    sides = dict.fromkeys(axes, 1)
    growing = set(axes)
    while growing:
        for axis in sorted(growing):
            trial = {**sides, axis: sides[axis] + 1}
            if trial[axis] > shape[axis] or not holds(trial):
                growing.discard(axis)
            else:
                sides = trial
    return sides
