"""One plane from samples to image: solve, combine, residual."""

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


def reconstruct_plane(
    preparation: Preparation,
    maps: CoilMaps | None,
    kspace: NDArray[Any],
    mask: NDArray[np.bool_],
    callback: Callback | None = None,
) -> PlaneResult:
    """Solve one plane by the settings' method and combine.

    Parameters
    ----------
    preparation : Preparation
    maps : CoilMaps or None
        None for the coil-by-coil method, which needs none.
    kspace : complex64 (coil, rows, columns)
        Whitened samples of all coils.
    mask : bool (rows, columns)
    callback : callable, optional
        Called as callback(iteration, optimality).
    """
    if maps is None:
        return _coil_by_coil(preparation, kspace, mask)
    settings, kappa = preparation.settings, np.float32(preparation.kappa)
    encoding = Encoding(maps.virtual / kappa, mask)
    virtual = preparation.compression.apply(kspace)
    solution: Solution | None = None
    if settings.method == "zero-filled":
        u = zero_filled(encoding, virtual, mask)
    elif settings.method == "tikhonov":
        solution = tikhonov(
            encoding,
            encoding.to_range(virtual),
            float(settings.tikhonov_strength),
            tolerance=settings.tolerance,
            max_iterations=settings.max_iterations,
            callback=callback,
        )
        u = solution.image
    else:
        problem = Problem(
            encoding,
            encoding.to_range(virtual),
            settings.wavelet,
            float(settings.wavelet_strength),
            float(settings.tv_strength),
        )
        solution = solve(
            problem, tolerance=settings.tolerance, max_iterations=settings.max_iterations, callback=callback
        )
        u = solution.image
    m = np.where(maps.support, u / kappa, 0).astype(np.complex64)
    residuals = consistency.residual(m, maps.whitened, kspace, mask)
    difference = consistency.residual_image(residuals, maps.whitened)
    if settings.combination == "root-sum-of-squares":
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
