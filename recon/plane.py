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
from recon.preparation import Preparation
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
        Whitened, zero where not sampled.
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
    planes: list[tuple[NDArray[Any], NDArray[np.bool_]]],
    callback: Callback | None = None,
) -> list[PlaneResult]:
    """Solve one plane, or the frames of a series as one problem, by the settings' method and combine.

    Parameters
    ----------
    preparation : Preparation
    maps : CoilMaps or None
        Shared by the planes; None for the coil-by-coil method, which needs none.
    planes : list of (kspace, mask)
        Whitened samples of all coils, complex64 (coil, rows, columns), and bool (rows, columns).
    callback : callable, optional
        Called as callback(iteration, optimality).

    Returns
    -------
    list of PlaneResult
        One for each plane; the solution of a series is the same object in each.
    """
    if maps is None:
        return [_coil_by_coil(preparation, kspace, mask) for kspace, mask in planes]
    if len(planes) == 1:
        kspace, mask = planes[0]
        u, solution = _solve_plane(preparation, maps, kspace, mask, callback)
        return [_finish(preparation, maps, u, kspace, mask, solution)]
    u, solution = _solve_series(preparation, maps, planes, callback)
    pairs = zip(u, planes, strict=True)
    return [_finish(preparation, maps, frame, kspace, mask, solution) for frame, (kspace, mask) in pairs]


def _solve_plane(
    preparation: Preparation,
    maps: CoilMaps,
    kspace: NDArray[Any],
    mask: NDArray[np.bool_],
    callback: Callback | None,
) -> tuple[NDArray[Any], Solution | None]:
    """u of one plane."""
    settings = preparation.settings
    encoding = Encoding(maps.virtual / np.float32(preparation.kappa), mask)
    virtual = preparation.compression.apply(kspace)
    if settings.method == "zero-filled":
        return zero_filled(encoding, virtual, mask), None
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
    planes: list[tuple[NDArray[Any], NDArray[np.bool_]]],
    callback: Callback | None,
) -> tuple[NDArray[Any], Solution]:
    """u of all frames of a slice, (frame, rows, columns)."""
    settings = preparation.settings
    masks = np.stack([mask for _, mask in planes])
    encoding = Encoding(maps.virtual[:, np.newaxis] / np.float32(preparation.kappa), masks, "series")
    data = encoding.to_range(
        np.stack([preparation.compression.apply(kspace) for kspace, _ in planes], axis=1)
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
    kspace: NDArray[Any],
    mask: NDArray[np.bool_],
    solution: Solution | None,
) -> PlaneResult:
    """Image units, residual and combination of one plane."""
    m = np.where(maps.support, u / np.float32(preparation.kappa), 0).astype(np.complex64)
    residuals = consistency.residual(m, maps.whitened, kspace, mask)
    difference = consistency.residual_image(residuals, maps.whitened)
    if preparation.settings.combination == "root-sum-of-squares":
        m = root_sum_of_squares(mix(preparation.whitening.unwhitener, maps.whitened * m))
    return PlaneResult(_cropped(preparation, m), _cropped(preparation, difference), residuals, solution)


def _coil_by_coil(preparation: Preparation, kspace: NDArray[Any], mask: NDArray[np.bool_]) -> PlaneResult:
    """Root-sum-of-squares of density-compensated coil images: they reproduce their samples, so no residual is left."""
    images = inverse_transform(kspace * density_weights(mask))
    image = root_sum_of_squares(mix(preparation.whitening.unwhitener, images))
    nothing = np.zeros_like(image)
    return PlaneResult(
        _cropped(preparation, image), _cropped(preparation, nothing), np.zeros_like(kspace), None
    )


def _cropped(preparation: Preparation, plane: NDArray[Any]) -> NDArray[np.complex64]:
    return np.ascontiguousarray(crop_centre(plane, preparation.image_columns), np.complex64)
