"""How far a job is: one fraction that only grows, whichever thread tells, and one way to cancel all of them."""

from __future__ import annotations

import threading
from collections.abc import Callable
from typing import Final

import numpy as np

from recon.scan import PlaneIndex
from recon.settings import Settings

#: called as progress(stage, fraction of the whole job); raise from it to cancel between two iterations.
Progress = Callable[[str, float], None]

STAGES: Final = (
    "read", "inspect", "whiten", "crop", "compress", "coil-maps", "strengths", "solve", "combine", "consistency",
    "write",
)  # fmt: skip
#: share of the whole job that is over when the pass over all data ends, and when the last plane is written.
PREPARED: Final = 0.05
PLANES_DONE: Final = 0.98
#: solves that the search for strengths is worth.
SEARCH_SOLVES: Final = 1.5
_SEARCH_ITERATIONS: Final = 80


class Teller:
    """Turns what happens in each stage, in whichever thread, into one fraction that only grows."""

    def __init__(self, progress: Progress | None) -> None:
        self.progress = progress
        self.fraction = 0.0
        self._lock = threading.RLock()
        self._done, self._groups = 0, 1
        self._begun = PREPARED
        self._within: dict[PlaneIndex, float] = {}
        self._error: BaseException | None = None

    def __call__(self, stage: str, fraction: float | None = None) -> None:
        with self._lock:
            if self._error is not None:  # raised in another thread: the whole job is cancelled
                raise self._error
            if fraction is not None:
                self.fraction = max(self.fraction, min(fraction, 1.0))
            if self.progress is not None:
                try:
                    self.progress(stage, self.fraction)
                except BaseException as error:
                    self._error = error
                    raise

    def preparing(self, stage: str, fraction: float) -> None:
        """Progress within the pass over all data, the first part of the job."""
        self(stage, PREPARED * fraction)

    def search(self, asked: int, groups: int) -> Callable[[int, float], None]:
        """Callback of the search for strengths on some of the groups, which takes its share before they begin."""
        share = SEARCH_SOLVES * asked / (SEARCH_SOLVES * asked + groups)
        before, self._begun = PREPARED, PREPARED + share * (PLANES_DONE - PREPARED)
        iterations = 0

        def tell(iteration: int, optimality: float) -> None:
            nonlocal iterations
            with self._lock:
                iterations += 1
                # how many it takes is not known beforehand
                over = 1 - np.exp(-iterations / (_SEARCH_ITERATIONS * asked))
                self("strengths", before + float(over) * (self._begun - before))

        return tell

    def begin(self, groups: int) -> None:
        """The groups of planes begin."""
        self._groups = groups
        self("coil-maps", self._begun)

    def finished(self, group: PlaneIndex) -> None:
        """One more group, named by its first plane, is written."""
        with self._lock:
            self._done += 1
            self._within.pop(group, None)
            self._advance("write")

    def iteration(self, group: PlaneIndex, settings: Settings) -> Callable[[int, float], None]:
        """Callback of the solver; the residual falls geometrically, so its logarithm tells how far the solve is."""
        goal = np.log(settings.tolerance)

        def tell(iteration: int, optimality: float) -> None:
            by_residual = np.log(min(max(optimality, settings.tolerance), 1.0)) / goal
            by_count = iteration / settings.max_iterations
            with self._lock:
                self._within[group] = 0.95 * float(max(by_residual, by_count))
                self._advance("solve")

        return tell

    def _advance(self, stage: str) -> None:
        over = self._done + sum(self._within.values())
        self(stage, self._begun + (PLANES_DONE - self._begun) * over / self._groups)
