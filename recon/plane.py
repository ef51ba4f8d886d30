"""One plane, or the frames of a series together, from samples to image: solve, combine, residual."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon import consistency
from recon.coils.combination import root_sum_of_squares
from recon.coils.maps import CoilMaps
from recon.coils.noise import mix
from recon.linear import density_weights, tikhonov, zero_filled
from recon.operators.encoding import Encoding
from recon.operators.fourier import crop_centre, inverse_transform
from recon.preparation import Plane, Preparation
from recon.solver import Problem, Solution, solve

Callback = Callable[[int, float], None]


@dataclass(frozen=True)
class PlaneResult:
    """Image and residual of one plane.

    Attributes
    ----------
    image : complex64 (rows, image columns)
    residual_image : complex64 (rows, image columns)
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

    Returns
    -------
    list of PlaneResult
        One for each plane; the solution of a series is the same object in each.
    """
    if maps is None:
        return [_coil_by_coil(preparation, plane) for plane in planes]
    if len(planes) == 1:
        u, solution = _solve_plane(preparation, maps, planes[0], callback)
        return [_finish(preparation, maps, u, planes[0], solution)]
    u, solution = _solve_series(preparation, maps, planes, callback)
    return [
        _finish(preparation, maps, frame, plane, solution) for frame, plane in zip(u, planes, strict=True)
    ]


def _solve_plane(
    preparation: Preparation,
    maps: CoilMaps,
    plane: Plane,
    callback: Callback | None,
) -> tuple[NDArray[Any], Solution | None]:
    """u of one plane."""
    settings = preparation.settings
    scaled = maps.virtual / np.float32(preparation.kappa)
    virtual = preparation.compression.apply(plane.kspace)
    if settings.method == "zero-filled":
        # a mean estimates its position whatever its noise: weights would act as a filter on the image
        return zero_filled(Encoding(scaled, plane.mask), virtual, plane.mask), None
    encoding = Encoding(scaled, plane.mask, weights=plane.weights)
    data = encoding.to_range(virtual)
    if settings.method == "tikhonov":
        solution = tikhonov(
            encoding,
            data,
            float(settings.tikhonov_strength),
            tolerance=settings.tolerance,
            max_iterations=settings.max_iterations,
            callback=callback,
        )
    else:
        strengths = float(settings.wavelet_strength), float(settings.tv_strength)
        solution = _solve(preparation, Problem(encoding, data, settings.wavelet, *strengths), callback)
    return solution.image, solution


def _solve_series(
    preparation: Preparation,
    maps: CoilMaps,
    planes: list[Plane],
    callback: Callback | None,
) -> tuple[NDArray[Any], Solution]:
    """u of all frames of a slice, (frame, rows, columns)."""
    settings = preparation.settings
    masks = np.stack([plane.mask for plane in planes])
    weights = None
    if any(plane.weights is not None for plane in planes):
        weights = np.stack([plane.mask if plane.weights is None else plane.weights for plane in planes])
    encoding = Encoding(maps.virtual[:, np.newaxis] / np.float32(preparation.kappa), masks, "series", weights)
    data = encoding.to_range(
        np.stack([preparation.compression.apply(plane.kspace) for plane in planes], axis=1)
    )
    problem = Problem(
        encoding,
        data,
        settings.wavelet,
        float(settings.wavelet_strength),
        float(settings.tv_strength),
        float(settings.temporal_strength),
        float(settings.low_rank_strength),
    )
    solution = _solve(preparation, problem, callback)
    return solution.image, solution


def _solve(preparation: Preparation, problem: Problem, callback: Callback | None) -> Solution:
    settings = preparation.settings
    return solve(
        problem, tolerance=settings.tolerance, max_iterations=settings.max_iterations, callback=callback
    )


def _finish(
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
    if preparation.settings.combination == "root-sum-of-squares":
        m = root_sum_of_squares(mix(preparation.whitening.unwhitener, maps.whitened * m))
    return PlaneResult(_cropped(preparation, m), _cropped(preparation, difference), residuals, solution)


def _coil_by_coil(preparation: Preparation, plane: Plane) -> PlaneResult:
    """Root-sum-of-squares of density-compensated coil images: they reproduce their samples, so no residual is left."""
    images = inverse_transform(plane.kspace * density_weights(plane.mask))
    image = root_sum_of_squares(mix(preparation.whitening.unwhitener, images))
    nothing = np.zeros_like(image)
    return PlaneResult(
        _cropped(preparation, image), _cropped(preparation, nothing), np.zeros_like(plane.kspace), None
    )


def _cropped(preparation: Preparation, plane: NDArray[Any]) -> NDArray[np.complex64]:
    return np.ascontiguousarray(crop_centre(plane, preparation.image_columns), np.complex64)
