"""What a scanner adds to an object: receive fields, phase, correlated noise, and a mask. Plain NumPy, float64.

Nothing here is taken from `recon`, so that a mistake there cannot hide in the simulated scans.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


def positions(shape: tuple[int, int]) -> tuple[Real, Real]:
    """Return ``(y, x)`` of the pixel centres in halves of the field of view, the origin at pixel n // 2."""
    rows, columns = shape
    y, x = (np.arange(rows) - rows // 2) * (2.0 / rows), (np.arange(columns) - columns // 2) * (2.0 / columns)
    return np.asarray(y[:, None], dtype=np.float64), np.asarray(x[None, :], dtype=np.float64)


def loop_fields(shape: tuple[int, int], coils: int, rng: np.random.Generator) -> Complex:
    """Return receive fields ``Bx - i By`` of circular loops around the object (Biot-Savart law).

    ``B(r) = sum over segments of dl x (r - l) / |r - l|^3``, in the plane through the loops' centres. Loops
    face the middle from 1.45 to 1.65 halves of the field of view away; places and gains come from `rng`.

    Returns
    -------
    ndarray, shape (coils, rows, columns), complex128
    """
    y, x = positions(shape)
    turn = 2 * np.pi * (np.arange(40) + 0.5) / 40
    fields = np.zeros((coils, *shape), dtype=np.complex128)
    for c in range(coils):
        angle = 2 * np.pi * (c + rng.uniform(-0.15, 0.15)) / coils
        distance, radius = rng.uniform(1.45, 1.65), rng.uniform(0.65, 0.8)
        gain = rng.uniform(0.8, 1.2) * np.exp(2j * np.pi * rng.uniform())
        outward = np.array([math.cos(angle), math.sin(angle)])
        along = np.array([-math.sin(angle), math.cos(angle)])
        for t in turn:
            px, py = distance * outward + radius * math.cos(t) * along
            pz = radius * math.sin(t)
            dx, dy = -math.sin(t) * along
            dz = math.cos(t)
            rx, ry, rz = x - px, y - py, -pz
            cube = (rx**2 + ry**2 + rz**2) ** 1.5
            fields[c] += gain * ((dy * rz - dz * ry) - 1j * (dz * rx - dx * rz)) / cube
    return fields / len(turn)


def smooth_phase(shape: tuple[int, int], rng: np.random.Generator) -> Complex:
    """Return ``exp(i phi)``, ``phi`` a quadratic that varies by a few radians across the field of view."""
    y, x = positions(shape)
    a = rng.uniform(-1, 1, size=5)
    phase = 1.2 * a[0] * x + 1.2 * a[1] * y + 0.8 * a[2] * x * y + 0.8 * a[3] * x**2 + 0.8 * a[4] * y**2
    return np.asarray(np.exp(1j * phase))


def centred_fft(image: Complex) -> Complex:
    """Return the unitary FFT over the last two axes, the origin at index n // 2 on both sides."""
    axes = (-2, -1)
    return np.fft.fftshift(np.fft.fft2(np.fft.ifftshift(image, axes=axes), norm="ortho"), axes=axes)


def centred_ifft(kspace: Complex) -> Complex:
    """Return the inverse of `centred_fft`."""
    axes = (-2, -1)
    return np.fft.fftshift(np.fft.ifft2(np.fft.ifftshift(kspace, axes=axes), norm="ortho"), axes=axes)


def central_part(kspace: Complex, matrix: tuple[int, int]) -> Complex:
    """Return central k-space scaled so that the smaller image keeps the values of the larger one."""
    rows, columns = kspace.shape[-2:]
    top, left = rows // 2 - matrix[0] // 2, columns // 2 - matrix[1] // 2
    part = kspace[..., top : top + matrix[0], left : left + matrix[1]]
    return part * math.sqrt(matrix[0] * matrix[1] / (rows * columns))


def noise_covariance(coils: int, spread: float, correlation: float, rng: np.random.Generator) -> Complex:
    """Return a coil covariance: neighbours correlated, standard deviations apart by the factor `spread`."""
    distance = np.abs(np.subtract.outer(np.arange(coils), np.arange(coils)))
    phases = np.exp(2j * np.pi * rng.uniform(size=coils))
    correlated = (correlation ** np.minimum(distance, coils - distance)) * np.outer(phases, phases.conj())
    sd = spread ** rng.permutation(np.linspace(0, 1, coils))
    return np.asarray(correlated * np.outer(sd, sd))


def draw_noise(covariance: Complex, shape: tuple[int, ...], rng: np.random.Generator) -> Complex:
    """Return complex Gaussian noise of the given coil covariance, shape ``(coils, *shape)``."""
    white = rng.standard_normal((2, covariance.shape[0], *shape))
    values, vectors = np.linalg.eigh(covariance)
    factor = vectors * np.sqrt(np.maximum(values, 0))
    return np.tensordot(factor, (white[0] + 1j * white[1]) / math.sqrt(2), axes=1)


def line_mask(
    rows: int, columns: int, acceleration: float, rng: np.random.Generator, *, calibration: int | None = None
) -> NDArray[np.bool_]:
    """Return a 1-D variable-density mask: every central row, others by chance, denser near the centre."""
    wanted = round(rows / acceleration)
    central = (24 if acceleration <= 4 else 16) if calibration is None else calibration
    lines = np.zeros(rows, dtype=np.bool_)
    start = rows // 2 - central // 2
    lines[start : start + central] = True
    density = (1 - np.abs(np.arange(rows) - rows // 2) / (rows // 2 + 1)) ** 2
    density[lines] = 0
    extra = rng.choice(rows, size=wanted - central, replace=False, p=density / density.sum())
    lines[extra] = True
    return np.repeat(lines[:, None], columns, axis=1)


def point_mask(
    rows: int, columns: int, acceleration: float, rng: np.random.Generator, *, calibration: int = 24
) -> NDArray[np.bool_]:
    """Return a 2-D variable-density mask: every central position, others by chance, denser near the centre."""
    y, x = positions((rows, columns))
    density = 1 / (0.05 + y**2 + x**2)
    mask = np.zeros((rows, columns), dtype=np.bool_)
    top, left = rows // 2 - calibration // 2, columns // 2 - calibration // 2
    mask[top : top + calibration, left : left + calibration] = True
    density[mask] = 0
    extra = round(rows * columns / acceleration) - int(mask.sum())
    chosen = rng.choice(rows * columns, size=extra, replace=False, p=(density / density.sum()).ravel())
    mask.ravel()[chosen] = True
    return mask
