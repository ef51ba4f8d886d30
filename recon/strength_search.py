"""A few strengths tried on some planes with samples kept out, each solved from the one before."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.coils.maps import CoilMaps
from recon.holdout import held_out_of_frames
from recon.linear import tikhonov
from recon.parallel import in_order
from recon.preparation import Plane, Preparation
from recon.problem import make_problem, measurement
from recon.solver import solve
from recon.statement import Problem, Solution

#: part of the samples outside the calibration region that is kept out, and the fewest lines worth it.
HELD_OUT: Final = 0.2
FEWEST: Final = 3
#: factors of the scale that are tried: the first two, then on towards the smaller error until it rises, within limits.
STEP: Final = 2.3
FURTHEST: Final = 2
#: the wavelet's share is tried so much below and above what is known beforehand, one half.
SHARE_STEP: Final = 0.25
#: tolerance of the first solve; a scan that takes no more than so many iterations converges fast, and the others stop
#: early, since little error is left then; where it takes more, they are more exact.
FIRST_TOLERANCE: Final = 5e-4
FAST: Final = 40
FAST_TOLERANCE: Final = 1e-3
SLOW_TOLERANCE: Final = 3.5e-4
MAX_ITERATIONS: Final = 80

Names = tuple[str, ...]
Strengths = dict[str, float]
SPATIAL: Final = ("wavelet_strength", "tv_strength")
Callback = Callable[[int, float], None]


@dataclass
class Trial:
    """One plane, or series, with some of its samples kept out."""

    problem: Problem
    whole: Any
    data: NDArray[Any]
    held: NDArray[np.bool_]
    is_linear: bool
    callback: Callback
    start: Solution | None = None
    tolerance: float | None = None
    solved: Strengths = field(default_factory=dict)

    def error(self, strengths: Strengths) -> float:
        """Sum over the samples kept out of |E u - y|^2, u solved from the others, beginning at the last solution."""
        if self.tolerance is None:
            self._solve(strengths, FIRST_TOLERANCE)
            assert self.start is not None
            is_fast = self.start.iterations <= FAST
            self.tolerance = FAST_TOLERANCE if is_fast else SLOW_TOLERANCE
        if self.start is None or self.start.optimality > self.tolerance or strengths != self.solved:
            self._solve(strengths, self.tolerance)
        assert self.start is not None
        difference = np.where(self.held, self.whole.forward(self.start.image) - self.data, 0)
        return float(np.sum(np.abs(difference) ** 2, dtype=np.float64))

    def _solve(self, strengths: Strengths, tolerance: float) -> None:
        self.solved = dict(strengths)
        if self.is_linear:
            self.start = tikhonov(
                self.problem.encoding,
                self.problem.data,
                strengths["tikhonov_strength"],
                tolerance=tolerance,
                max_iterations=MAX_ITERATIONS,
                start=self.start,
                callback=self.callback,
                is_real=self.problem.constraint == "real",
            )
            return
        self.start = solve(
            replace(self.problem, **dict[str, Any](strengths)),
            tolerance=tolerance,
            max_iterations=MAX_ITERATIONS,
            start=self.start,
            callback=self.callback,
        )


class Search:
    """Coordinate search over few values each, every one solved from the one before."""

    def __init__(self, trials: list[Trial], threads: int) -> None:
        self.trials, self.threads = trials, threads
        coils = (len(trial.data) for trial in trials)
        places = (int(np.broadcast_to(trial.held, trial.data.shape[1:]).sum()) for trial in trials)
        self.samples = sum(c * n for c, n in zip(coils, places, strict=True))
        self.curve: list[dict[str, float]] = []

    def error(self, strengths: Strengths) -> float:
        """Mean square over all samples kept out, of all planes; it joins the curve."""
        errors = in_order(lambda trial: trial.error(strengths), self.trials, threads=self.threads)
        error = sum(errors) / self.samples
        self.curve.append({**strengths, "held_out_error": error})
        return error

    def best_factor(
        self, strengths: Strengths, names: Names, *, weakest: int = -1, strongest: int = FURTHEST
    ) -> tuple[float, float]:
        """Factor of `names` with the smallest error, between the steps tried; and the best of these itself.

        Steps are tried from 0 to 1, and then on to the better side as long as the error falls, up to the limits.
        """

        def at(step: int) -> float:
            return self.error({**strengths, **{name: strengths[name] * STEP**step for name in names}})

        errors = {step: at(step) for step in (0, 1)}
        step = 1
        while errors[step] < errors[step - 1] and step < strongest:
            step += 1
            errors[step] = at(step)
        step = 0
        # equal errors tell of no side, and the parabola needs three
        while errors[step] <= errors[step + 1] and step > weakest:
            step -= 1
            # a weak solution begun from a strong one lingers there, and would pass for as good
            for trial in self.trials:
                trial.start = None
            errors[step] = at(step)
        return STEP ** vertex(errors), STEP ** min(errors, key=lambda step: errors[step])

    def best_share(self, strengths: Strengths) -> float:
        """Share of the wavelet in the spatial strengths with the smallest error, in or between those tried."""
        total = sum(strengths[name] for name in SPATIAL)
        share = strengths["wavelet_strength"] / total
        known = min(
            trial["held_out_error"]
            for trial in self.curve
            if all(np.isclose(trial[name], strengths[name], rtol=1e-9) for name in SPATIAL)
        )
        errors = {share: known}
        for other in (share - SHARE_STEP, share + SHARE_STEP):
            mixed = {"wavelet_strength": other * total, "tv_strength": (1 - other) * total}
            errors[other] = self.error({**strengths, **mixed})
        return vertex(errors)


def vertex(errors: Mapping[Any, float]) -> float:
    """Where the parabola through the smallest of at least three values and its neighbours is lowest."""
    places = sorted(errors)
    lowest = min(range(len(places)), key=lambda i: errors[places[i]])
    middle = min(max(lowest, 1), len(places) - 2)
    x = np.array(places[middle - 1 : middle + 2], np.float64)
    y = np.array([errors[place] for place in places[middle - 1 : middle + 2]], np.float64)
    curvature, slope, _ = np.polyfit(x - x[1], y / max(float(y.max()), np.finfo(np.float64).tiny), 2)
    if curvature <= 0:
        return float(places[lowest])
    return float(np.clip(x[1] - slope / (2 * curvature), x[0], x[2]))


def make_trial(
    preparation: Preparation,
    maps: CoilMaps,
    planes: list[Plane],
    rng: np.random.Generator,
    callback: Callback,
) -> Trial | None:
    """A trial on one plane, or on the frames of a series; None where there are too few samples to spare."""
    held = held_out_of_frames([plane.mask for plane in planes], HELD_OUT, rng, fewest=FEWEST)
    if not any(each.any() for each in held):
        return None
    kept = [_without(plane, out) for plane, out in zip(planes, held, strict=True)]
    whole, data = measurement(preparation, maps, planes)
    is_linear = preparation.settings.method == "tikhonov"
    problem = make_problem(preparation, maps, kept)
    places: NDArray[np.bool_] = held[0] if len(held) == 1 else np.stack(held)
    # in hybrid space a line is held out at every column
    if -1 not in whole.axes:
        places = np.asarray(np.any(places, axis=-1, keepdims=True))
    return Trial(problem, whole, data, places, is_linear, callback)


def _without(plane: Plane, held: NDArray[np.bool_]) -> Plane:
    kept = plane.mask & ~held
    weights = None if plane.weights is None else np.where(kept, plane.weights, np.float32(0))
    return plane._replace(kspace=np.where(kept, plane.kspace, 0), mask=kept, weights=weights)


def no_callback(iteration: int, optimality: float) -> None:
    """Nobody listens."""
