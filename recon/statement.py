"""What the solver is asked, and what it answers."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal

from numpy.typing import NDArray

from recon.operators.encoding import Encoding

Constraint = Literal["none", "real", "nonnegative"]
StopReason = Literal["optimal", "iteration-limit", "nothing-to-solve"]


@dataclass(frozen=True)
class Problem:
    """One plane's problem.

    Attributes
    ----------
    encoding : Encoding
    data : complex ndarray
        Whitened samples in the range of `encoding` (see `Encoding.to_range`).
    wavelet : str
    wavelet_strength, tv_strength, temporal_strength, low_rank_strength : float
        lambda_w, lambda_t, lambda_f and lambda_r, in noise units; the last two for a series alone.
    weights : (float, float, float)
        Weights of the differences along slabs, rows and columns: for a volume whose voxels are not cubes.
    wavelet_shifts : int
        S; more than 2^levels shifts do not differ and are left out.
    constraint : {"none", "real", "nonnegative"}
        On the image that `encoding` acts on: a phase is taken out of it by `Encoding.absorb`.
    """

    encoding: Encoding
    data: NDArray[Any]
    wavelet: str
    wavelet_strength: float
    tv_strength: float
    temporal_strength: float = 0.0
    low_rank_strength: float = 0.0
    weights: tuple[float, float, float] = (1.0, 1.0, 1.0)
    wavelet_shifts: int = 1
    constraint: Constraint = "none"


@dataclass(frozen=True)
class Solution:
    """What the solver returns; not having converged is a value here, not an exception.

    Attributes
    ----------
    image : complex ndarray
        What the problem's encoding acts on, in noise units (see `Encoding.with_phase`).
    padded, dual, low_rank_dual, shift_duals : ndarray
        Full primal and dual state, for warm starts.
    objective : list of float
        Objective after each iteration.
    optimality : float
        Relative optimality residual at the end (see `solve`).
    iterations : int
    stop_reason : {"optimal", "iteration-limit", "nothing-to-solve"}
    """

    image: NDArray[Any]
    padded: NDArray[Any]
    dual: NDArray[Any]
    low_rank_dual: NDArray[Any] | None
    objective: list[float] = field(repr=False)
    optimality: float
    iterations: int
    stop_reason: StopReason
    shift_duals: NDArray[Any] | None = None
