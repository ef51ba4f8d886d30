"""Small multi-coil volumes of a rasterised object, for tests of the whole path."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from recon.axes import LabelledArray
from recon.scan import Scan
from tests.recon.helpers import Array, complex_normal


def transform3(image: Array, axes: tuple[int, ...] = (-3, -2, -1)) -> Array:
    """Return the centred unitary FFT, written with numpy alone."""
    spectrum = np.fft.fftn(np.fft.ifftshift(image, axes=axes), axes=axes, norm="ortho")
    return np.asarray(np.fft.fftshift(spectrum, axes=axes))


def inverse3(kspace: Array, axes: tuple[int, ...] = (-3, -2, -1)) -> Array:
    """Return the inverse of `transform3`."""
    image = np.fft.ifftn(np.fft.ifftshift(kspace, axes=axes), axes=axes, norm="ortho")
    return np.asarray(np.fft.fftshift(image, axes=axes))


def grid3(shape: tuple[int, int, int]) -> list[Array]:
    """Return z, y and x from -1 to 1 over the field of view, zero at n // 2."""
    return list(np.meshgrid(*((np.arange(n) - n // 2) * (2 / n) for n in shape), indexing="ij"))


def fruit3(shape: tuple[int, int, int]) -> Array:
    """Return an ellipsoid with a stone and a hollow, with a smooth phase."""
    z, y, x = grid3(shape)
    image = 1.0 * ((z / 0.7) ** 2 + (y / 0.75) ** 2 + (x / 0.8) ** 2 < 1)
    image -= 0.5 * (((z - 0.1) / 0.25) ** 2 + ((y + 0.1) / 0.3) ** 2 + ((x - 0.2) / 0.3) ** 2 < 1)
    image += 0.6 * (((z + 0.3) / 0.15) ** 2 + ((y - 0.2) / 0.2) ** 2 + ((x + 0.3) / 0.2) ** 2 < 1)
    return np.asarray(image * np.exp(1j * (0.5 * z + 0.4 * y - 0.7 * x)))


def maps3(coils: int, shape: tuple[int, int, int]) -> Array:
    """Return smooth maps of coils about the volume, sum |S|^2 = 1."""
    z, y, x = grid3(shape)
    maps = []
    for coil in range(coils):
        angle = 2 * np.pi * coil / coils
        distance = (
            (y - 1.2 * np.sin(angle)) ** 2 + (x - 1.2 * np.cos(angle)) ** 2 + (z - 0.6 * (-1) ** coil) ** 2
        )
        maps.append(
            np.exp(-0.5 * distance + 1j * (0.8 * y * np.cos(angle) + 0.6 * z * np.sin(angle) + angle))
        )
    stack = np.stack(maps)
    return np.asarray(stack / np.sqrt(np.sum(np.abs(stack) ** 2, axis=0)))


def plane_mask(shape: tuple[int, int], acceleration: float, block: int = 12, seed: int = 5) -> Array:
    """Return a random mask of (kz, ky) with a calibration block."""
    mask = np.random.default_rng(seed).random(shape) < 1 / acceleration
    z, y = (n // 2 - min(block, n) // 2 for n in shape)
    mask[z : z + block, y : y + block] = True
    return mask


@dataclass(frozen=True)
class Volume:
    """A scan, its noise-free coil-combined object, and its parts as arrays (coil, kz, ky, kx), (kz, ky)."""

    scan: Scan
    truth: Array
    kspace: Array
    mask: Array
    noise: Array


def volume(
    shape: tuple[int, int, int] = (20, 22, 24),
    *,
    coils: int = 4,
    acceleration: float = 2.0,
    noise: float = 0.02,
    sizes: Mapping[str, int] | None = None,
    oversampling: int = 1,
    attributes: Mapping[str, Any] | None = None,
    has_mask: bool = True,
    has_noise: bool = True,
    mask: Array | None = None,
) -> Volume:
    """Return a volume scan; `shape` is z, y, x of the image; frames and contrasts differ in brightness."""
    rng = np.random.default_rng(23)
    truth = fruit3(shape)
    clean = truth * maps3(coils, shape)
    wide = np.zeros((*clean.shape[:-1], shape[2] * oversampling), np.complex128)
    start = wide.shape[-1] // 2 - shape[2] // 2
    wide[..., start : start + shape[2]] = clean
    outer = tuple((sizes or {}).values())
    brightness = 1 + 0.25 * np.arange(int(np.prod(outer))).reshape(outer)[..., None, None, None, None]
    kspace = brightness * transform3(wide)
    kspace = kspace + noise * complex_normal(rng, kspace.shape)
    sampled = plane_mask(shape[:2], acceleration) if mask is None else mask
    full = sampled[..., np.newaxis] if sampled.ndim == 2 else sampled
    silent = (noise * complex_normal(rng, (coils, 2000))).astype(np.complex64)
    kept = (kspace * full).astype(np.complex64)
    scan = Scan(
        LabelledArray(kept, (*(sizes or {}), "coil", "kz", "ky", "kx")),
        mask_array=LabelledArray(sampled, ("kz", "ky", "kx")[: sampled.ndim]) if has_mask else None,
        noise_array=LabelledArray(silent, ("coil", "sample")) if has_noise else None,
        attributes={
            **({"readout_oversampling": float(oversampling)} if oversampling > 1 else {}),
            **(attributes or {}),
        },
    )
    return Volume(scan, brightness[..., 0, :, :, :] * truth, kept, sampled, silent)
