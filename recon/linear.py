"""Linear baselines: what users compare with."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter

from recon.operators.base import inner, norm
from recon.operators.encoding import Encoding
from recon.statement import Solution, StopReason


def density_weights(mask: NDArray[np.bool_]) -> NDArray[np.float32]:
    """One over the local sampling density, zero where not sampled, one where fully sampled.

    The density is the share of sampled positions in a window wide enough to hold some at the mean acceleration.

    Parameters
    ----------
    mask : bool (rows, columns) or (slabs, rows, columns)

    Returns
    -------
    float32, shape of the mask
    """
    acceleration = mask.size / max(int(mask.sum()), 1)
    is_constant = bool((mask == mask[..., :1]).all())
    free = mask.ndim - is_constant
    side = 2 * int(np.ceil(acceleration ** (1 / free))) + 1
    window = (*(side,) * free, *(1,) * is_constant)
    density = uniform_filter(mask.astype(np.float64), window, mode="nearest")
    return np.asarray(np.divide(mask, density, out=np.zeros(mask.shape), where=mask), np.float32)


def zero_filled(encoding: Encoding, kspace: NDArray[Any], mask: NDArray[np.bool_]) -> NDArray[Any]:
    """u = (S^H S)^-1 S^H F^H (w y): inverse transform of density-compensated k-space, sensitivity-weighted.

    Parameters
    ----------
    encoding : Encoding
    kspace : complex (coil, rows, columns)
        Whitened, in the encoding's virtual coils.
    mask : bool (rows, columns)
    """
    weighted = encoding.adjoint(encoding.to_range(kspace * density_weights(mask)))
    power = encoding.power()
    return np.asarray(np.divide(weighted, power, out=np.zeros_like(weighted), where=power > 0))


def tikhonov(
    encoding: Encoding,
    data: NDArray[Any],
    strength: float,
    *,
    tolerance: float,
    max_iterations: int,
    start: Solution | None = None,
    callback: Callable[[int, float], None] | None = None,
    is_real: bool = False,
) -> Solution:
    """Minimise 1/2 ||E u - d||^2 + strength/2 ||u||^2 by conjugate gradients (Hestenes & Stiefel 1952).

    Stops when ||E^H d - (E^H E + strength) u|| < tolerance ||E^H d||.

    Parameters
    ----------
    encoding : Encoding
    data : complex ndarray
        In the encoding's range.
    strength : float
        Weight in noise units.
    tolerance, max_iterations, start, callback
        As for `recon.solver.solve`.
    is_real : bool
        Whether u is real: then all gradients are of their real parts.

    Returns
    -------
    Solution
    """
    b = encoding.adjoint(data)
    if is_real:
        b.imag = 0
    scale, energy = norm(b), norm(data) ** 2
    x, r = np.zeros_like(b), b.copy()
    if start is not None and scale > 0:
        x = start.image.copy()
        r -= encoding.normal(x) + b.real.dtype.type(strength) * x
        if is_real:
            r.imag = 0
    p, rho = r.copy(), norm(r) ** 2
    objective: list[float] = []
    optimality = 0.0 if scale == 0 else float(np.sqrt(rho) / scale)
    iteration = 0
    while optimality >= tolerance and iteration < max_iterations:
        q = encoding.normal(p) + b.real.dtype.type(strength) * p
        if is_real:
            q.imag = 0
        alpha = rho / inner(p, q).real
        x += b.real.dtype.type(alpha) * p
        r -= b.real.dtype.type(alpha) * q
        rho_next = norm(r) ** 2
        p = r + b.real.dtype.type(rho_next / rho) * p
        rho = rho_next
        iteration += 1
        optimality = float(np.sqrt(rho) / scale)
        # for a quadratic, with residual r = b - H x: 1/2 <x, H x> - Re <b, x> = -1/2 Re <x, b + r>
        objective.append(0.5 * (energy - inner(x, b + r).real))
        if callback is not None:
            callback(iteration, optimality)
    reason: StopReason = (
        "nothing-to-solve" if scale == 0 else "optimal" if optimality < tolerance else "iteration-limit"
    )
    return Solution(
        image=x,
        padded=x,
        dual=np.zeros((2, *x.shape), x.dtype),
        low_rank_dual=None,
        objective=objective,
        optimality=optimality,
        iterations=iteration,
        stop_reason=reason,
    )
