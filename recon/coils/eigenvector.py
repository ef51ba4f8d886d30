"""Subspace eigenvector coil maps (Uecker et al. 2014).

Patches of calibration k-space span a subspace; at each pixel r the coil sensitivities S(r) are the eigenvector, with
eigenvalue one, of

    W(r) = 1/k^2 sum_{p, p'} T(p, p') exp(2 pi i (p - p') r / N),   T = projection on that subspace

where p, p' run over the positions of a k x k patch. W depends on p - p' alone, so T is summed along its diagonals
once, and W on any grid is one small Fourier sum.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

#: side of the k-space patch.
KERNEL: Final = 6
#: patches span the singular vectors whose value exceeds this fraction of the largest (common practice, no source).
RELATIVE_SINGULAR_VALUE: Final = 0.02
#: and the largest singular value that noise of unit variance alone produces (Marchenko & Pastur 1967), times this.
NOISE_EDGE: Final = 1.0
#: maps are zero where the eigenvalue is below this: outside the object, or where no single map explains the data.
SMALLEST_EIGENVALUE: Final = 0.85
#: maps are computed on a grid this many times finer than W's own bandwidth, then interpolated.
GRID_FACTOR: Final = 2


def eigenvector_maps(
    blocks: list[NDArray[Any]],
    shape: tuple[int, int],
    reference: NDArray[Any],
    *,
    has_noise_units: bool,
) -> tuple[NDArray[np.complex64], NDArray[np.float32]]:
    """Coil maps of one slice.

    Parameters
    ----------
    blocks : list of complex (coil, rows, columns)
        Whitened calibration k-space; several frames or contrasts of the slice share one set of maps.
    shape : (rows, columns)
        Of the maps.
    reference : complex (coil)
        Direction whose projection is made real and positive at every pixel: it fixes the phase.
    has_noise_units : bool
        Whether the noise variance is one, so that its share of the singular values is known.

    Returns
    -------
    maps : complex64 (coil, rows, columns)
        sum_c |S_c|^2 = 1, zero where the eigenvalue is below `SMALLEST_EIGENVALUE`.
    eigenvalue : float32 (rows, columns)
        Largest eigenvalue of W: one inside the object.
    """
    coils = blocks[0].shape[0]
    kernel = tuple(min(KERNEL, *(block.shape[axis] // 2 + 1 for block in blocks)) for axis in (1, 2))
    subspace = _signal_subspace(blocks, kernel, has_noise_units)
    lags = _lag_sums(subspace, kernel, coils)
    grid = tuple(min(n, GRID_FACTOR * 2 * (2 * k - 1)) for n, k in zip(shape, kernel, strict=True))
    pixels = _on_grid(lags, grid).reshape(-1, coils, coils)
    values, vectors = np.linalg.eigh(pixels)
    vector, value = vectors[..., -1], np.clip(values[..., -1], 0, 1)
    phase = np.exp(-1j * np.angle(vector @ reference.conj()))
    coarse = (vector * phase[:, np.newaxis]).T.reshape(coils, *grid)
    maps = interpolate(coarse, shape)
    eigenvalue = interpolate(value.reshape(1, *grid), shape)[0].real.astype(np.float32)
    return normalised(maps, eigenvalue >= SMALLEST_EIGENVALUE), eigenvalue


def normalised(maps: NDArray[Any], inside: NDArray[np.bool_]) -> NDArray[np.complex64]:
    """Scale maps to sum_c |S_c|^2 = 1 inside, zero outside."""
    size = np.sqrt(np.sum(np.abs(maps) ** 2, axis=0))
    scale = np.divide(inside, size, out=np.zeros_like(size), where=size > 0)
    return np.asarray(maps * scale, np.complex64)


def _signal_subspace(
    blocks: list[NDArray[Any]], kernel: tuple[int, ...], has_noise_units: bool
) -> NDArray[Any]:
    """Orthonormal basis (coil * k * k, rank) of the patches' signal."""
    size = blocks[0].shape[0] * kernel[0] * kernel[1]
    gram = np.zeros((size, size), np.complex128)
    patches = 0
    for block in blocks:
        windows = np.lib.stride_tricks.sliding_window_view(block, kernel, axis=(1, 2))
        columns = windows.transpose(0, 3, 4, 1, 2).reshape(size, -1)
        gram += columns @ columns.conj().T
        patches += columns.shape[1]
    values, vectors = np.linalg.eigh(gram)
    limit = RELATIVE_SINGULAR_VALUE**2 * values[-1]
    if has_noise_units:
        limit = max(limit, NOISE_EDGE * (np.sqrt(patches) + np.sqrt(size)) ** 2)
    keep = values > min(limit, 0.999 * values[-1])
    return np.asarray(vectors[:, keep])


def _lag_sums(subspace: NDArray[Any], kernel: tuple[int, ...], coils: int) -> NDArray[Any]:
    """Sum of the projection over equal lags p - p': (2k-1, 2k-1, coil, coil), lag zero at index k-1.

    The correlation over patch positions is a product in Fourier space, padded so that lags do not wrap.
    """
    spans = tuple(2 * k - 1 for k in kernel)
    basis = subspace.reshape(coils, *kernel, -1)
    spectrum = np.fft.fft2(basis, s=spans, axes=(1, 2))
    power = np.einsum("cxyr,dxyr->xycd", spectrum, spectrum.conj(), optimize=True)
    lags = np.fft.ifft2(power, axes=(0, 1))
    return np.fft.fftshift(lags, axes=(0, 1)) / (kernel[0] * kernel[1])


def _on_grid(lags: NDArray[Any], grid: tuple[int, ...]) -> NDArray[Any]:
    """W at the points of a grid over the field of view: (rows, columns, coil, coil)."""
    matrices = lags
    for axis, n in enumerate(grid):
        span = lags.shape[axis]
        position = (np.arange(n) - n // 2) / n
        lag = np.arange(span) - span // 2
        wave = np.exp(2j * np.pi * np.outer(position, lag))
        matrices = np.moveaxis(np.tensordot(wave, matrices, axes=(1, axis)), 0, axis)
    return matrices


def nearest(fine: NDArray[Any], shape: tuple[int, ...]) -> NDArray[Any]:
    """Values of a plane at the nearest points of a coarser grid over the same field of view; centres n//2 coincide."""
    at = [
        np.clip(np.rint((np.arange(n) - n // 2) * (m / n)).astype(int) + m // 2, 0, m - 1)
        for n, m in zip(shape, fine.shape, strict=True)
    ]
    return np.asarray(fine[np.ix_(*at)])


def interpolate(coarse: NDArray[Any], shape: tuple[int, int]) -> NDArray[Any]:
    """Linear interpolation from a grid over the field of view to a finer one; centres n//2 coincide, ends wrap."""
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
