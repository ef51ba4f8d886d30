"""What several tests of the numerics share: reference transforms, masks, small multi-coil problems."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.phantom import ring_coils

Array = NDArray[Any]


def numpy_transform(image: Array) -> Array:
    """Return the centred unitary FFT over the last two axes, written with numpy alone."""
    axes = (-2, -1)
    kspace: Array = np.fft.fftshift(np.fft.fft2(np.fft.ifftshift(image, axes=axes), norm="ortho"), axes=axes)
    return kspace


def numpy_inverse(kspace: Array) -> Array:
    """Return the inverse of `numpy_transform`."""
    axes = (-2, -1)
    return np.fft.fftshift(np.fft.ifft2(np.fft.ifftshift(kspace, axes=axes), norm="ortho"), axes=axes)


def complex_normal(rng: np.random.Generator, shape: tuple[int, ...], dtype: Any = np.complex128) -> Array:
    """Return complex noise with E|n|^2 = 1."""
    noise: Array = ((rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) / np.sqrt(2)).astype(dtype)
    return noise


def radial_mask(n: int, lines: int) -> NDArray[np.bool_]:
    """Return the grid points nearest to evenly spread lines through DC, the first at 0 degrees."""
    mask = np.zeros((n, n), dtype=np.bool_)
    r = np.arange(-(n // 2), n - n // 2)
    for angle in np.pi * np.arange(lines) / lines:
        cosine, sine = np.cos(angle), np.sin(angle)
        steep = abs(sine) > abs(cosine)
        rows = r if steep else np.rint(r * sine / cosine).astype(int)
        columns = np.rint(r * cosine / sine).astype(int) if steep else r
        inside = (abs(rows) <= n // 2) & (abs(columns) <= n // 2)
        rows, columns = rows[inside] + n // 2, columns[inside] + n // 2
        kept = (rows < n) & (columns < n)
        mask[rows[kept], columns[kept]] = True
    return mask


def line_mask(rows: int, columns: int, every: int, calibration: int) -> NDArray[np.bool_]:
    """Return a regular 1-D mask with a calibration block about row ``rows // 2``."""
    lines = (np.arange(rows) - rows // 2) % every == 0
    start = rows // 2 - calibration // 2
    lines[start : start + calibration] = True
    return np.repeat(lines[:, None], columns, axis=1)


def coil_maps(coils: int, shape: tuple[int, int], dtype: Any = np.complex128) -> Array:
    """Return smooth maps of coils on a ring, shape (coils, rows, columns), with sum |S|^2 near one."""
    maps = np.stack([m.on_grid(shape) for m in ring_coils(coils)])
    scaled: Array = (maps / np.sqrt(np.mean(np.sum(np.abs(maps) ** 2, axis=0)))).astype(dtype)
    return scaled


def nrmse(image: Array, truth: Array, *, scaled: bool = False) -> float:
    """Return ``||s a - t|| / ||t||``, with the best real scale ``s`` or 1."""
    scale = np.vdot(image, truth).real / np.vdot(image, image).real if scaled else 1.0
    return float(np.linalg.norm(scale * image - truth) / np.linalg.norm(truth))
