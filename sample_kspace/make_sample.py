"""Make the sample scans: a cut citrus fruit in an eight-coil receiver, from closed formulas and a fixed seed.

With the project installed, `python sample_kspace/make_sample.py [FOLDER]` writes `cut_fruit_full.h5` and
`cut_fruit_undersampled.h5` into the folder (this one by default).

The scene is invented: a food-science lab images fruit for defects that the peel hides. Every part of it is
an ellipse, coil maps and phase are short Fourier series, so k-space is exact, not sampled.
"""

from __future__ import annotations

import math
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.formats import write_scan
from recon.phantom import Ellipse, ellipse_kspace, ring_coils, wave_phase

COILS = 8
MATRIX = (192, 192)
SLICES = 2
ACCELERATION = 3.2
CALIBRATION_LINES = 24
NOISE_SAMPLES = 2048
SIGNAL_TO_NOISE = 30.0  # of the flesh in the fully sampled combination, at the centre
SAMPLE_TIME_US = 10.0
NOISE_SAMPLE_TIME_US = 5.0
RECEIVER_NOISE_BANDWIDTH = 0.8
SEED = 20260

SEGMENTS = 10
FLESH = 0.8


@dataclass(frozen=True)
class Sample:
    """Both scans and what they were made from."""

    kspace: NDArray[np.complex64]
    mask: NDArray[np.bool_]
    noise: NDArray[np.complex64]
    covariance: NDArray[np.complex128]


def fruit(position: int) -> list[Ellipse]:
    """Return the ellipses of one slice; slices differ in size, seeds and defects.

    Overlapping values add: the peel is the outer disc less an inner one, and so on inwards.
    """
    squeeze = 1.0 if position == 0 else 0.94
    a, b = 0.80 * squeeze, 0.76 * squeeze
    parts = [
        Ellipse(0.55, (0.0, 0.0), (a, b)),  # oily outer peel
        Ellipse(-0.37, (0.0, 0.0), (0.93 * a, 0.93 * b)),  # dry white pith
        Ellipse(0.32, (0.0, 0.0), (0.07, 0.06)),  # core
    ]
    wedge = 360 / SEGMENTS
    for s in range(SEGMENTS):
        angle = wedge * (s + 0.35 * position) + 7
        parts += _segment(s, angle, a, b)
    if position == 0:
        parts.append(Ellipse(-0.24, (0.39 * a, 0.36 * b), (0.055, 0.035), 30))  # bruise, well visible
        parts.append(Ellipse(-0.08, (-0.48 * a, 0.26 * b), (0.07, 0.05), -20))  # faint dry patch
    else:
        parts.append(Ellipse(0.14, (-0.30 * a, -0.40 * b), (0.05, 0.04), 50))  # over-ripe spot
        parts.append(Ellipse(-0.5, (0.01 * a, 0.52 * b), (0.018, 0.018)))  # insect's tunnel
    return parts


def _segment(number: int, angle: float, a: float, b: float) -> list[Ellipse]:
    """Return one segment: flesh, juice sacs of slightly different brightness, and in some a seed."""

    def at(radius: float, offset: float = 0.0) -> tuple[float, float]:
        turn = math.radians(angle + offset)
        return (radius * a * math.cos(turn), radius * b * math.sin(turn))

    flesh = FLESH - 0.18 + 0.03 * ((7 * number) % 5 - 2)
    parts = [
        Ellipse(flesh, at(0.52), (0.29 * a, 0.128 * a), angle),
        Ellipse(0.05, at(0.62), (0.16 * a, 0.10 * a), angle),
    ]
    for sac in range(5):
        contrast = 0.07 if (sac + number) % 2 else -0.07
        parts.append(
            Ellipse(contrast, at(0.42 + 0.075 * sac, 5.5 * (-1) ** sac), (0.05 * a, 0.016 * a), angle)
        )
    if number % 3 == 0:
        parts.append(Ellipse(-0.45, at(0.37), (0.045, 0.020), angle))
    return parts


def coil_covariance(rng: np.random.Generator) -> NDArray[np.complex128]:
    """Return a noise covariance with neighbours correlated by 0.3 and standard deviations from 1 to 1.8."""
    distance = np.abs(np.subtract.outer(np.arange(COILS), np.arange(COILS)))
    phases = np.exp(2j * np.pi * rng.uniform(size=COILS))
    sd = rng.permutation(np.linspace(1, 1.8, COILS))
    correlation = 0.3 ** np.minimum(distance, COILS - distance)
    return np.asarray(correlation * np.outer(phases, phases.conj()) * np.outer(sd, sd), dtype=np.complex128)


def draw_noise(
    covariance: NDArray[np.complex128], shape: tuple[int, ...], rng: np.random.Generator
) -> NDArray[np.complex128]:
    """Return complex noise of the given coil covariance, shape ``(coils, *shape)``."""
    white = rng.standard_normal((2, COILS, *shape)) / math.sqrt(2)
    return np.tensordot(np.linalg.cholesky(covariance), white[0] + 1j * white[1], axes=1)


def line_mask(rng: np.random.Generator) -> NDArray[np.bool_]:
    """Return the measured rows: a central block, and others by chance, denser near the centre."""
    rows = MATRIX[0]
    lines = np.zeros(rows, dtype=np.bool_)
    start = rows // 2 - CALIBRATION_LINES // 2
    lines[start : start + CALIBRATION_LINES] = True
    density = (1 - np.abs(np.arange(rows) - rows // 2) / (rows // 2 + 1)) ** 2
    density[lines] = 0
    count = round(rows / ACCELERATION) - CALIBRATION_LINES
    lines[rng.choice(rows, size=count, replace=False, p=density / density.sum())] = True
    return lines


def make_sample() -> Sample:
    """Return the sample; every call gives the same numbers."""
    rng = np.random.default_rng(SEED)
    phase = wave_phase(0.5, (1, 1), 0.4)
    maps = [coil * phase for coil in ring_coils(COILS)]
    clean = np.stack([ellipse_kspace(fruit(s), MATRIX, maps=maps) for s in range(SLICES)])
    covariance = coil_covariance(rng)
    centre = np.array([m.on_grid((3, 3))[1, 1] for m in maps])
    signal_to_noise = FLESH * math.sqrt((centre.conj() @ np.linalg.solve(covariance, centre)).real)
    covariance *= (signal_to_noise / SIGNAL_TO_NOISE) ** 2
    kspace = clean + np.moveaxis(draw_noise(covariance, (SLICES, *MATRIX), rng), 1, 0)
    # Noise per sample grows with the receiver's bandwidth, so the quicker noise scan is noisier.
    faster = SAMPLE_TIME_US / NOISE_SAMPLE_TIME_US * RECEIVER_NOISE_BANDWIDTH
    return Sample(
        kspace=kspace.astype(np.complex64),
        mask=line_mask(rng),
        noise=draw_noise(covariance * faster, (NOISE_SAMPLES,), rng).astype(np.complex64),
        covariance=covariance,
    )


def write_sample(folder: Path) -> list[Path]:
    """Write both scans into a folder and return their paths."""
    sample = make_sample()
    common: dict[str, Any] = {
        "noise": sample.noise,
        "noise_attributes": {
            "sample_time_us": NOISE_SAMPLE_TIME_US,
            "receiver_noise_bandwidth": RECEIVER_NOISE_BANDWIDTH,
        },
        "attributes": {
            "field_of_view_mm": [96.0, 96.0, 3.0],
            "slice_position_mm": [[0.0, 0.0, 0.0], [0.0, 0.0, 6.0]],
            "read_direction": [1.0, 0.0, 0.0],
            "phase_direction": [0.0, 1.0, 0.0],
            "slice_direction": [0.0, 0.0, 1.0],
            "slice_spacing_mm": 6.0,
            "sample_time_us": SAMPLE_TIME_US,
        },
        "repetition_time_ms": 500.0,
    }
    axes = ("slice", "coil", "ky", "kx")
    full, under = folder / "cut_fruit_full.h5", folder / "cut_fruit_undersampled.h5"
    write_scan(
        full,
        sample.kspace,
        axes,
        mask=np.ones_like(sample.mask),
        mask_axes=("ky",),
        title="Orchard bench: cut fruit, every line",
        **common,
    )
    write_scan(
        under,
        sample.kspace * sample.mask[:, None],
        axes,
        mask=sample.mask,
        mask_axes=("ky",),
        title="Orchard bench: cut fruit, 60 of 192 lines",
        compression="gzip",
        **common,
    )
    return [full, under]


def main() -> None:
    """Write the sample scans and print where they are."""
    folder = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent
    folder.mkdir(parents=True, exist_ok=True)
    for path in write_sample(folder):
        print(f"{path} ({path.stat().st_size / 1e6:.2f} MB)")


if __name__ == "__main__":
    main()
