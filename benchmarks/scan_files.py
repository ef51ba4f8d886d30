"""Scan files of real anatomy for jobs that are timed and weighed from file to file.

They are as large as real scans and their images are as sparse, so the solver works as long as it would on one. Errors
are not judged on them: volumes are simulated on the grid that they are reconstructed on.
"""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy.ndimage import zoom

from benchmarks.anatomy import COILS, Case, head_volume, simulate
from benchmarks.scanner import draw_noise, noise_covariance, point_mask

#: slices of the head that take turns in a scan of many.
POSITIONS = (64, 78, 92, 106)
NOISE_SAMPLES = 4096
#: how much larger the head's slices are made for a matrix of 256: 0.75 of 412 x 344.
ENLARGED = 1.9


def large_case(position: int, snr: float, seed: int, *, matrix: int = 256, points: bool = False) -> Case:
    """Return an axial case of a square matrix at R=4 (R=2 below a matrix of 128, for the calibration's sake).

    The head is enlarged where its own grid is too small.
    """
    enlarged = ENLARGED if matrix > 128 else 1.0
    acceleration = 4 if matrix >= 128 else 2
    case = Case("axial", position, (matrix, matrix), acceleration, snr, seed, enlarged=enlarged)
    return replace(case, mask_kind="points") if points else case


def _start(file: h5py.File, shape: tuple[int, ...], axes: str) -> h5py.Dataset:
    file.attrs.update(layout="fallow-scan", layout_version=1)
    kspace = file.create_dataset("kspace", shape, np.complex64)
    kspace.attrs["axes"] = axes
    return kspace


def _put(file: h5py.File, name: str, values: NDArray[np.generic], axes: str) -> None:
    file[name] = values
    file[name].attrs["axes"] = axes


def write_slices(path: Path, *, slices: int, matrix: int) -> None:
    """Write a scan of axial slices at R=4 and an SNR of 40, (slice, coil, ky, kx).

    A few slices of the head take turns, each time with another phase, so that the mean work for each slice does not
    depend on their number. Receiver and noise are the same for all.
    """
    known = [simulate(large_case(position, 40, 31, matrix=matrix)) for position in POSITIONS[:slices]]
    level = math.sqrt(np.trace(known[0].covariance).real)
    with h5py.File(path, "w") as file:
        kspace = _start(file, (slices, COILS, matrix, matrix), "slice,coil,ky,kx")
        for i in range(slices):
            drawn = known[i % len(known)]
            scale = level / math.sqrt(np.trace(drawn.covariance).real)
            kspace[i] = (drawn.full_kspace * known[0].mask * scale * np.exp(1j * i)).astype(np.complex64)
        _put(file, "mask", known[0].mask[:, 0], "ky")
        _put(file, "noise", known[0].noise, "coil,sample")


def volume_fields(shape: tuple[int, int, int], coils: int) -> NDArray[np.complex64]:
    """Return receive fields of loops around a volume, two rings of them: dipoles far outside, smooth inside."""
    grid = np.meshgrid(*(np.linspace(-1, 1, 12) for _ in range(3)), indexing="ij")
    fields = []
    for c in range(coils):
        angle, height = 4 * np.pi * c / coils, 0.5 if c < coils // 2 else -0.5
        place = (height, 1.7 * math.cos(angle), 1.7 * math.sin(angle))
        square = sum((axis - at) ** 2 for axis, at in zip(grid, place, strict=True))
        turn = angle + 0.6 * (grid[1] * math.sin(angle) - grid[2] * math.cos(angle))
        fields.append(np.exp(1j * turn) / square**1.5)
    factors = [n / 12 for n in shape]
    parts = [zoom(f.real, factors, order=3) + 1j * zoom(f.imag, factors, order=3) for f in fields]
    return np.array(parts, np.complex64)


def write_volume(path: Path, *, matrix: tuple[int, int, int], acceleration: float, calibration: int) -> None:
    """Write a volume with two phase encodes, (coil, kz, ky, kx), sampled at points of (kz, ky), SNR about 40."""
    rng = np.random.default_rng(77)
    head = head_volume().transpose(2, 1, 0)
    factors = [n / size for n, size in zip(matrix, head.shape, strict=True)]
    picture = np.clip(zoom(head, factors, order=1), 0, 1).astype(np.float32)
    z, y, x = np.meshgrid(*(np.linspace(-1, 1, n, dtype=np.float32) for n in matrix), indexing="ij")
    image = (picture * np.exp(1j * (0.6 * x + 0.8 * y * y - 0.5 * z))).astype(np.complex64)
    fields = volume_fields(matrix, COILS)
    strength = np.sqrt(np.sum(np.abs(fields) ** 2, axis=0))
    covariance = noise_covariance(COILS, 2.0, 0.3, rng)
    # about: the combination gains a little more from the quieter coils than the mean says
    mean_signal = float(np.mean((picture * strength)[picture > 0.1]))
    covariance *= (mean_signal / 40) ** 2 / (np.trace(covariance).real / COILS)
    mask = point_mask(matrix[0], matrix[1], acceleration, rng, calibration=calibration)
    deviation = np.sqrt(np.diag(covariance).real)
    with h5py.File(path, "w") as file:
        kspace = _start(file, (COILS, *matrix), "coil,kz,ky,kx")
        for c, field in enumerate(fields):
            shifted = np.fft.ifftshift(field * image)
            clean = np.fft.fftshift(scipy.fft.fftn(shifted, norm="ortho", overwrite_x=True))
            noise = rng.standard_normal((2, *matrix), np.float32) * np.float32(deviation[c] / math.sqrt(2))
            clean += noise[0] + 1j * noise[1]
            clean *= mask[..., np.newaxis]
            kspace[c] = clean
        _put(file, "mask", mask, "kz,ky")
        silent = draw_noise(np.diag(np.diag(covariance)), (NOISE_SAMPLES,), rng)
        _put(file, "noise", silent.astype(np.complex64), "coil,sample")
