"""The problem of a whole volume: maps of all readout positions side by side, weights from the voxels' shape."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.coils.maps import MapFigures
from recon.linear import tikhonov
from recon.operators.encoding import Encoding
from recon.preparation import Preparation
from recon.scan import Scan
from recon.solver import solve
from recon.statement import Problem, Solution


@dataclass(frozen=True)
class StackedMaps:
    """Coil maps of all readout positions.

    Attributes
    ----------
    scaled : complex64 (virtual coil, z, y, x)
        Whitened and compressed, for an image in noise units.
    figures : dict
        How they were made, by readout position.
    """

    scaled: NDArray[np.complex64]
    figures: dict[int, MapFigures]

    @property
    def support(self) -> NDArray[np.bool_]:
        """Where any map is not zero, (z, y, x)."""
        inside = np.zeros(self.scaled.shape[1:], np.bool_)
        for map_ in self.scaled:
            inside |= map_ != 0
        return inside


def stack_maps(preparation: Preparation, tell: Callable[[str], None]) -> StackedMaps:
    """Make the maps of every readout position and put them side by side."""
    positions = preparation.scan.axes["slice"]
    scaled = np.empty((preparation.compression.coils, *preparation.shape, positions), np.complex64)
    figures = {}
    for x in range(positions):
        tell("coil-maps")
        maps = preparation.make_maps(x)
        scaled[..., x] = maps.virtual / np.float32(preparation.kappa)
        figures[x] = maps.figures
    return StackedMaps(scaled, figures)


def voxel_weights(scan: Scan) -> tuple[float, float, float]:
    """Weights of the differences along z, y and x: proportional to 1 / voxel size, their mean square one.

    So total variation is that of the object in space, whatever grid it is seen on. Cubic voxels, or a field of view
    that is not known, give ones.
    """
    fields = scan.attributes.get("field_of_view_mm")
    if fields is None:
        return (1.0, 1.0, 1.0)
    by_axis = dict(zip(("kx", "ky", "kz"), fields, strict=True))
    per_mm = np.array([scan.axes[axis] / by_axis[axis] for axis in ("kz", "ky", "kx")])
    z, y, x = per_mm / np.sqrt(np.mean(per_mm**2))
    return float(z), float(y), float(x)


def make_problem(preparation: Preparation, encoding: Encoding, data: NDArray[Any]) -> Problem:
    """The compressed-sensing problem of a volume with the strengths of the settings."""
    assert preparation.volume is not None
    settings = preparation.settings
    return Problem(
        encoding,
        data,
        settings.wavelet,
        float(settings.wavelet_strength),
        float(settings.tv_strength),
        weights=voxel_weights(preparation.volume.scan),
        wavelet_shifts=settings.wavelet_shifts,
        constraint=settings.constraint,
    )


def solve_volume(
    preparation: Preparation, encoding: Encoding, data: NDArray[Any], callback: Callable[[int, float], None]
) -> Solution:
    """u of one volume by an iterative method."""
    settings = preparation.settings
    tolerance, max_iterations = settings.tolerance, settings.max_iterations
    if settings.method == "tikhonov":
        strength = float(settings.tikhonov_strength)
        return tikhonov(
            encoding,
            data,
            strength,
            tolerance=tolerance,
            max_iterations=max_iterations,
            callback=callback,
            is_real=settings.constraint == "real",
        )
    problem = make_problem(preparation, encoding, data)
    return solve(problem, tolerance=tolerance, max_iterations=max_iterations, callback=callback)
