"""Moving objects from real anatomy, and what solving their frames together gains over frame by frame.

Each frame of a series moves, deforms or changes a slice of the head on its native grid, is measured by the same coils
with the same phase, and has noise and lines of its own: a few central ones and others by chance. Both images come from
the same samples with default settings; the first lets frames be solved one by one, the second ties them together.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import map_coordinates

from benchmarks.anatomy import COILS, NOISE_SAMPLES, OBJECT_LEVEL, head_volume
from benchmarks.figures import Bar, Figure, Result, Run
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
    positions,
    smooth_phase,
)
from benchmarks.search import side_by_side
from recon.axes import LabelledArray
from recon.pipeline import reconstruct
from recon.scan import Scan
from recon.settings import parse_settings

CALIBRATION: Final = 10


@dataclass(frozen=True)
class Motion:
    """One series: what moves, and how it is measured.

    Attributes
    ----------
    frames, matrix : int
    acceleration, snr : float
        As for `benchmarks.anatomy.Case`, in each frame.
    """

    kind: str
    acceleration: float
    snr: float
    seed: int
    frames: int = 16
    matrix: int = 112
    position: int = 88


MOTIONS: Final = (
    Motion("beat", 6, 30, 201),
    Motion("breathe", 6, 30, 202, position=100),
    Motion("uptake", 8, 40, 203, position=80),
    Motion("pass", 6, 20, 204, position=94),
)


@dataclass(frozen=True)
class Series:
    """A measured series and its true frames, magnitudes (frame, rows, columns)."""

    scan: Scan
    truth: Real
    inside: NDArray[np.bool_]

    def error(self, image: NDArray[Any]) -> float:
        """Return the root-mean-square error of magnitudes over root-mean-square truth, in the object."""
        a, t = np.abs(image).astype(np.float64)[:, self.inside], self.truth[:, self.inside]
        return float(np.linalg.norm(a - t) / np.linalg.norm(t))


def _warped(picture: Real, down: Real, right: Real) -> Real:
    """The picture with what was at (y, x) moved by (down, right) pixels, to first order."""
    y, x = np.meshgrid(*(np.arange(n, dtype=np.float64) for n in picture.shape), indexing="ij")
    return np.asarray(
        np.clip(map_coordinates(picture, [y - down, x - right], order=3, mode="constant"), 0, 1.2)
    )


def _beat(picture: Real, time: float) -> Real:
    """A region in the middle swells and shrinks, twice in the series, by up to a fifth of its size."""
    y, x = positions((picture.shape[0], picture.shape[1]))
    away = np.exp(-(((y + 0.05) ** 2 + x**2) / 0.12))
    swell = 0.3 * np.sin(4 * np.pi * time) * away
    return _warped(picture, swell * (y + 0.05) * picture.shape[0] / 2, swell * x * picture.shape[1] / 2)


def _breathe(picture: Real, time: float) -> Real:
    """One end moves up and down by some 3 % of the field of view, one and a half times; the other stays."""
    y, _ = positions((picture.shape[0], picture.shape[1]))
    ramp = np.broadcast_to(1 / (1 + np.exp(8 * y)), picture.shape)
    shift = 0.03 * picture.shape[0] * (1 - np.cos(3 * np.pi * time)) / 2 * ramp
    return _warped(picture, np.asarray(shift), np.zeros(picture.shape))


def _uptake(picture: Real, time: float) -> Real:
    """Contrast agent: bright tissue takes it up early and loses it, a region takes it up late and keeps it."""
    y, x = positions((picture.shape[0], picture.shape[1]))
    early = np.where(time > 0.15, (time - 0.15) / 0.12 * np.exp(1 - (time - 0.15) / 0.12), 0)
    late = np.clip((time - 0.35) / 0.5, 0, 1)
    bright = 1 / (1 + np.exp(-(picture - 0.55) / 0.05))
    region = np.exp(-((((y - 0.25) / 0.3) ** 2 + ((x + 0.25) / 0.25) ** 2) ** 2))
    return np.asarray(picture * (1 + 0.5 * early * bright + 0.6 * late * region))


def _pass(picture: Real, time: float) -> Real:
    """A bright ball with an edge of two pixels crosses the object once."""
    y, x = positions((picture.shape[0], picture.shape[1]))
    distance = np.hypot(y + 0.5 - time, x + 0.15 * np.sin(2 * np.pi * time)) - 0.12
    ball = 1 / (1 + np.exp(distance * picture.shape[0]))
    return np.asarray(picture * (1 - ball) + 0.9 * ball)


KINDS: Final[dict[str, Callable[[Real, float], Real]]] = {
    "beat": _beat,
    "breathe": _breathe,
    "uptake": _uptake,
    "pass": _pass,
}


def simulate_series(motion: Motion) -> Series:
    """Return the scan of a motion; the same motion gives the same numbers.

    Raises
    ------
    benchmarks.anatomy.AnatomyMissingError
        When the package that carries the head is not installed.
    """
    rng = np.random.default_rng(motion.seed)
    picture = head_volume()[:, :, motion.position].T
    native, matrix = (picture.shape[0], picture.shape[1]), (motion.matrix, motion.matrix)
    phase = smooth_phase(native, rng)
    coil_seed = int(rng.integers(2**32))
    fields = loop_fields(native, COILS, np.random.default_rng(coil_seed))
    small_fields = loop_fields(matrix, COILS, np.random.default_rng(coil_seed))
    strength = np.sqrt(np.sum(np.abs(small_fields) ** 2, axis=0))
    clean: list[Complex] = []
    truth: list[Real] = []
    for frame in range(motion.frames):
        moved = KINDS[motion.kind](picture, frame / motion.frames) * phase
        clean.append(central_part(centred_fft(moved * fields), matrix))
        truth.append(np.abs(centred_ifft(central_part(centred_fft(moved), matrix))) * strength)
    frames = np.array(truth)
    inside = frames.mean(axis=0) > OBJECT_LEVEL * frames.max()
    covariance = noise_covariance(COILS, 2.0, 0.3, rng)
    precision = np.einsum("cyx,cd,dyx->yx", small_fields.conj(), np.linalg.inv(covariance), small_fields).real
    signal = frames.mean(axis=0) / strength * np.sqrt(precision)
    covariance *= (float(np.mean(signal[inside])) / motion.snr) ** 2
    masks = np.array(
        [
            line_mask(*matrix, motion.acceleration, rng, calibration=CALIBRATION)[:, 0]
            for _ in range(motion.frames)
        ]
    )
    kspace = np.array([part + draw_noise(covariance, matrix, rng) for part in clean])
    kspace *= masks[:, np.newaxis, :, np.newaxis]
    noise = draw_noise(covariance, (NOISE_SAMPLES,), rng)
    scan = Scan(
        LabelledArray(kspace.astype(np.complex64), ("frame", "coil", "ky", "kx")),
        mask_array=LabelledArray(masks, ("frame", "ky")),
        noise_array=LabelledArray(noise.astype(np.complex64), ("coil", "sample")),
    )
    return Series(scan, frames, inside)


ALONE: Final[dict[str, Any]] = {"temporal_strength": 0.0}
TIED: Final[dict[str, Any]] = {"temporal_strength": "auto"}


def compare(motion: Motion) -> dict[str, Any]:
    """Return the errors of both images of one motion."""
    series = simulate_series(motion)
    alone, tied = (reconstruct(series.scan, parse_settings(settings)) for settings in (ALONE, TIED))
    errors = series.error(alone.image), series.error(tied.image)
    return {
        "motion": motion.kind,
        "acceleration": motion.acceleration,
        "snr": motion.snr,
        "frame_by_frame_percent": 100 * errors[0],
        "together_percent": 100 * errors[1],
        "ratio": errors[1] / errors[0],
        "settings": {
            name: value for name, value in tied.report["settings"].items() if name.endswith("_strength")
        },
    }


def _reduced(motion: Motion) -> Motion:
    return Motion(motion.kind, 4, motion.snr, motion.seed, frames=6, matrix=64)


def measure_motion(run: Run) -> list[Result]:
    """Mean over the motions of the error together over the error frame by frame."""
    motions = [_reduced(motion) for motion in MOTIONS[:1]] if run.reduced else list(MOTIONS)
    rows = side_by_side(compare, motions, run.processes)
    ratios = [row["ratio"] for row in rows]
    return [Result("moving", float(np.mean(ratios)), {"worst": max(ratios), "motions": rows})]


def _work(run: Run) -> Callable[[], Any]:
    motion = _reduced(MOTIONS[0]) if run.reduced else MOTIONS[0]
    return partial(reconstruct, simulate_series(motion).scan, parse_settings(TIED))


MOVING = Figure(
    "moving",
    (Bar("moving", "error of 2-D + time over frame by frame, moving object", "ratio", 0.75, 0.60),),
    measure_motion,
    _work,
)
