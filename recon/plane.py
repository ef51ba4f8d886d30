"""One plane, or the frames of a series together, from samples to image: solve, combine, residual."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon import consistency
from recon.coils.adaptive import adaptive_directions
from recon.coils.combination import coil_images, combine_sets, root_sum_of_squares
from recon.coils.maps import CoilMaps
from recon.coils.noise import mix
from recon.linear import density_weights, tikhonov, zero_filled
from recon.operators.fourier import inverse_transform
from recon.preparation import Plane, Preparation
from recon.problem import make_problem, measurement
from recon.solver import solve
from recon.statement import Solution

Callback = Callable[[int, float], None]


@dataclass(frozen=True)
class PlaneResult:
    """Image and residual of one plane.

    Attributes
    ----------
    image, residual_image : complex64
        On the grid that is written (see `recon.grid`).
    residuals : complex64 (coil, rows, columns)
        Whitened and weighted, so that noise of unit variance is expected; zero where not sampled.
    solution : Solution or None
        None where nothing was iterated.
    """

    image: NDArray[np.complex64]
    residual_image: NDArray[np.complex64]
    residuals: NDArray[np.complex64]
    solution: Solution | None


def reconstruct_together(
    preparation: Preparation,
    maps: CoilMaps | None,
    planes: list[Plane],
    callback: Callback | None = None,
    *,
    start: Solution | None = None,
) -> list[PlaneResult]:
    """Solve one plane, or the frames of a series as one problem, by the settings' method and combine.

    Parameters
    ----------
    preparation : Preparation
    maps : CoilMaps or None
        Shared by the planes; None for the coil-by-coil method, which needs none.
    planes : list of Plane
        Whitened samples of all coils.
    callback : callable, optional
        Called as callback(iteration, optimality).
    start : Solution, optional
        Of a neighbouring problem.

    Returns
    -------
    list of PlaneResult
        One for each plane; the solution of a series is the same object in each.
    """
    if maps is None:
        return [_coil_by_coil(preparation, plane) for plane in planes]
    u, solution = _solve(preparation, maps, planes, callback, start)
    frames = [u] if len(planes) == 1 else u
    return [
        finish_plane(preparation, maps, frame, plane, solution)
        for frame, plane in zip(frames, planes, strict=True)
    ]


def _solve(
    preparation: Preparation,
    maps: CoilMaps,
    planes: list[Plane],
    callback: Callback | None,
    start: Solution | None,
) -> tuple[NDArray[Any], Solution | None]:
    """u of the planes, (frame, rows, columns); a single plane has no frame axis."""
    settings = preparation.settings
    tolerance, max_iterations = settings.tolerance, settings.max_iterations
    if settings.method == "zero-filled":
        # a mean estimates its position whatever its noise: weights would act as a filter on the image
        encoding, _ = measurement(preparation, maps, [plane._replace(weights=None) for plane in planes])
        virtual = preparation.compression_of(planes[0].position).apply(planes[0].kspace)
        return zero_filled(encoding, virtual, planes[0].mask), None
    if settings.method == "tikhonov":
        encoding, data = measurement(preparation, maps, planes)
        strength = float(settings.tikhonov_strength)
        solution = tikhonov(
            encoding,
            data,
            strength,
            tolerance=tolerance,
            max_iterations=max_iterations,
            start=start,
            callback=callback,
            is_real=settings.constraint == "real",
        )
    else:
        problem = make_problem(preparation, maps, planes)
        encoding = problem.encoding
        solution = solve(
            problem, tolerance=tolerance, max_iterations=max_iterations, start=start, callback=callback
        )
    return encoding.with_phase(solution.image), solution


def finish_plane(
    preparation: Preparation,
    maps: CoilMaps,
    u: NDArray[Any],
    plane: Plane,
    solution: Solution | None,
) -> PlaneResult:
    """Image units, residual and combination of one plane."""
    m = np.where(maps.support, u / np.float32(preparation.kappa), 0).astype(np.complex64)
    residuals = consistency.residual(m, maps.whitened, plane.kspace, plane.mask)
    difference = consistency.residual_image(residuals, maps.whitened)
    if plane.weights is not None:
        residuals = residuals * plane.weights
    written = preparation.grid.apply
    if preparation.settings.combination == "root-sum-of-squares":
        # magnitudes are taken last: interpolated ones would fall below zero
        image = root_sum_of_squares(
            written(mix(preparation.whitening.unwhitener, coil_images(m, maps.whitened)))
        )
    else:
        image = combine_sets(written(m))
    return PlaneResult(image, combine_sets(written(difference)), residuals, solution)


def _coil_by_coil(preparation: Preparation, plane: Plane) -> PlaneResult:
    """Combination of density-compensated coil images: they reproduce their samples, so no residual is left."""
    images = inverse_transform(plane.kspace * density_weights(plane.mask))
    if preparation.settings.combination == "adaptive":
        directions = adaptive_directions(images, preparation.compression.reference)
        physical = mix(preparation.whitening.unwhitener, directions)
        # maps of one in physical coils are the directions over this size
        size = np.sqrt(np.sum(np.abs(physical) ** 2, axis=0, dtype=np.float64)).astype(np.float32)
        image = preparation.grid.apply(size * np.sum(directions.conj() * images, axis=0))
        return PlaneResult(image, np.zeros_like(image), np.zeros_like(plane.kspace), None)
    image = root_sum_of_squares(preparation.grid.apply(mix(preparation.whitening.unwhitener, images)))
    return PlaneResult(image, np.zeros_like(image), np.zeros_like(plane.kspace), None)
