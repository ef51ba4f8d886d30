"""Scan files that must be refused, one writer each, and a good one that each departs from."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

COILS, ROWS, COLUMNS = 4, 32, 24

Write = Callable[[Path], object]


def kspace() -> NDArray[np.complex64]:
    """A disc seen by four coils, fully sampled, with a little noise."""
    y, x = np.mgrid[-1 : 1 : ROWS * 1j, -1 : 1 : COLUMNS * 1j]
    disc = (x**2 + y**2 < 0.6) * 1.0
    maps = [np.exp(-((x - a) ** 2) - (y - b) ** 2 + 1j * a) for a, b in ((-1, 0), (1, 0), (0, -1), (0, 1))]
    images = np.fft.ifftshift(np.stack(maps) * disc, axes=(-2, -1))
    generator = np.random.default_rng(1)
    noise = generator.normal(size=(2, COILS, ROWS, COLUMNS))
    samples = np.fft.fftshift(np.fft.fft2(images, norm="ortho"), axes=(-2, -1)) + 0.01 * (
        noise[0] + 1j * noise[1]
    )
    return np.asarray(samples, dtype=np.complex64)


def mask() -> NDArray[np.bool_]:
    """Every second line and twelve central ones."""
    lines: NDArray[np.bool_] = np.arange(ROWS) % 2 == 0
    lines[ROWS // 2 - 6 : ROWS // 2 + 6] = True
    return lines


def write(
    path: Path, *, samples: Any = None, axes: str | None = "coil,ky,kx", **datasets: tuple[Any, str]
) -> None:
    """Write a scan; `axes=None` leaves the labels out, further datasets come with theirs."""
    with h5py.File(path, "w") as file:
        file.attrs["layout"] = "fallow-scan"
        file.attrs["layout_version"] = 1
        written = file.create_dataset("kspace", data=kspace() if samples is None else samples)
        if axes is not None:
            written.attrs["axes"] = axes
        for name, (values, labels) in datasets.items():
            file.create_dataset(name, data=values).attrs["axes"] = labels


def good(path: Path) -> None:
    """A scan that is accepted."""
    samples = kspace()
    samples[:, ~mask()] = 0
    write(path, samples=samples, mask=(mask(), "ky"))


def _truncated(path: Path) -> None:
    good(path)
    path.write_bytes(path.read_bytes()[:3000])


def _without_kspace(path: Path) -> None:
    good(path)
    with h5py.File(path, "a") as file:
        del file["kspace"]


def _disagreeing(path: Path) -> None:
    good(path)
    with h5py.File(path, "a") as file:
        file["kspace"].attrs["axes_fastest_first"] = "ky,kx,coil"


def _spoiled(value: complex) -> Write:
    def spoil(path: Path) -> None:
        samples = kspace()
        samples[1, 4, 5] = value
        write(path, samples=samples)

    return spoil


def _without_calibration(path: Path) -> None:
    lines = np.arange(ROWS) % 3 == 0
    samples = kspace()
    samples[:, ~lines] = 0
    write(path, samples=samples, mask=(lines, "ky"))


#: What is wrong, the writer, and a word that the answer must hold.
BAD_SCANS: dict[str, tuple[Write, str]] = {
    "not HDF5": (lambda path: path.write_text("kspace"), "HDF5"),
    "empty": (lambda path: path.touch(), "HDF5"),
    "truncated": (_truncated, "truncated"),
    "no kspace": (_without_kspace, "/kspace"),
    "unlabelled axes": (lambda path: write(path, axes=None), "axes"),
    "unknown axis": (lambda path: write(path, axes="coil,ky,kq"), "kq"),
    "axes attributes disagreeing": (_disagreeing, "axes_fastest_first"),
    "mask of another shape": (lambda path: write(path, mask=(np.ones(ROWS + 1, bool), "ky")), "/mask"),
    "mask all false": (lambda path: write(path, mask=(np.zeros(ROWS, bool), "ky")), "mask"),
    "no calibration region": (_without_calibration, "calibration"),
    "NaN": (_spoiled(complex(np.nan, 0)), "NaN"),
    "infinite": (_spoiled(complex(0, np.inf)), "nf"),
    "integer k-space": (lambda path: write(path, samples=np.ones((COILS, ROWS, COLUMNS), np.int16)), "int16"),
    "real k-space": (
        lambda path: write(path, samples=np.ones((COILS, ROWS, COLUMNS), np.float32)),
        "complex",
    ),
    "axis of length zero": (
        lambda path: write(path, samples=np.ones((COILS, 0, COLUMNS), np.complex64)),
        "ky",
    ),
    "noise of other coils": (
        lambda path: write(path, noise=(np.ones((COILS + 1, 64), np.complex64), "coil,sample")),
        "/noise",
    ),
}
