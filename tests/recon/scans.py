"""Small multi-coil scans in memory, of analytic ellipses, for tests of the whole path."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from recon.axes import LabelledArray
from recon.phantom import Ellipse, ellipse_kspace, rasterise, ring_coils, wave_phase
from recon.scan import Scan
from tests.recon.helpers import Array, complex_normal, line_mask, numpy_inverse

OBJECT = (
    Ellipse(1.0, (0.02, -0.03), (0.62, 0.74), 10),
    Ellipse(-0.45, (0.2, 0.1), (0.18, 0.25)),
    Ellipse(0.5, (-0.25, -0.2), (0.15, 0.1), 40),
)
PHASE = wave_phase(0.4, (1, 1), 0.3)


@dataclass(frozen=True)
class Example:
    """A scan and the root-sum-of-squares of its noise-free, fully sampled coil images."""

    scan: Scan
    truth: Array
    inside: Array


def example(
    shape: tuple[int, int] = (48, 44),
    *,
    coils: int = 4,
    sizes: Mapping[str, int] | None = None,
    every: int = 2,
    noise: float = 0.02,
    plane: tuple[str, str] = ("ky", "kx"),
    attributes: Mapping[str, Any] | None = None,
    has_noise_scan: bool = True,
    covariance: Array | None = None,
    scale: float = 1.0,
) -> Example:
    """Return a scan with the given outer axes; brightness differs from plane to plane.

    `noise` is the standard deviation of a complex sample where no covariance is given; the object is about 1.
    """
    outer = dict(sizes or {})
    oversampling = float((attributes or {}).get("readout_oversampling", 1.0))
    encoded = (shape[0], round(shape[1] * oversampling))
    rng = np.random.default_rng(17)
    object_ = [
        Ellipse(e.value, (e.centre[0] / oversampling, e.centre[1]), e.semi_axes, e.angle) for e in OBJECT
    ]
    if oversampling != 1:
        object_ = [Ellipse(1.0, (0.0, 0.0), (0.6 / oversampling, 0.7)), Ellipse(-0.4, (0.1, 0.2), (0.1, 0.2))]
    clean = ellipse_kspace(object_, encoded, maps=[coil * PHASE for coil in ring_coils(coils)])
    brightness = 1 + 0.25 * np.arange(np.prod([*outer.values()], dtype=int)).reshape(tuple(outer.values()))
    kspace = brightness[..., None, None, None] * clean
    factor = noise * np.eye(coils) if covariance is None else np.linalg.cholesky(covariance)
    kspace = scale * (kspace + np.einsum("cd,...dyx->...cyx", factor, complex_normal(rng, kspace.shape)))
    mask = line_mask(*encoded, every=every, calibration=16)
    silent = scale * factor @ complex_normal(rng, (coils, 2000))
    truth = scale * np.sqrt((np.abs(numpy_inverse(clean)) ** 2).sum(axis=0))
    start = encoded[1] // 2 - shape[1] // 2
    truth = truth[:, start : start + shape[1]]
    inside = rasterise(object_, encoded, supersampling=2).real[:, start : start + shape[1]] > 0.1
    scan = Scan(
        LabelledArray((kspace * mask).astype(np.complex64), (*outer, "coil", *plane)),
        mask_array=LabelledArray(mask, plane),
        noise_array=LabelledArray(silent.astype(np.complex64), ("coil", "sample"))
        if has_noise_scan
        else None,
        attributes=dict(attributes or {}),
    )
    return Example(scan, brightness[..., None, None] * truth, inside)


def error(image: Array, found: Example) -> float:
    """Return the NRMSE of magnitudes inside the object, over all planes, at scale one."""
    a, t = np.abs(image)[..., found.inside], found.truth[..., found.inside]
    return float(np.linalg.norm(a - t) / np.linalg.norm(t))
