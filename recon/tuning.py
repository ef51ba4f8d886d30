"""Automatic strengths: measured samples are kept out, and the strengths that predict them best have their say.

For strengths lambda, u_lambda the solution without the samples H:

    error(lambda) = 1/|H| sum over H of |E u_lambda - y|^2   (1: noise alone)

(cross-validation by held-out samples: Stone 1974; in compressed sensing: Ward 2009). A handful of lines tells the best
strength to a factor of about two only, and too high: fewer lines were there to solve from, and the whole field of view
counts, not the object alone. So their minimum is combined with what was best on scans of known truth
(`recon.strengths`): the strengths chosen are the weighted geometric mean of the two, and the wavelet's share their
weighted arithmetic mean. On simulated scans of two heads this came closer to the best image than held-out lines,
predicted risk (SURE), discrepancy or fixed values alone: `benchmarks/README.md` has the table.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any, Final

import numpy as np

from recon.coils.maps import CoilMaps
from recon.map_shelf import MapShelf
from recon.preparation import Plane, Preparation
from recon.progress import Teller
from recon.scan import PlaneIndex
from recon.settings import Settings
from recon.statement import Solution
from recon.strength_search import SPATIAL, Callback, Names, Search, Strengths, make_trial, no_callback

#: weight of the held-out minimum against the strengths of known scans, in the logarithm.
TRUST: Final = 0.4
#: and of the wavelet's share, which so few samples hardly tell.
SHARE_TRUST: Final = 0.25
#: the same for Tikhonov's, whose best strengths lie far apart and whose minimum is sharp; and how far to look.
LINEAR_TRUST: Final = 0.6
LINEAR_STEPS: Final = 5
#: one plane is asked for so many of a scan, and no more than so many; of a series, its first frames.
PLANES_FOR_EACH: Final = 4
PLANES: Final = 3
FRAMES: Final = 12
#: slices count whose calibration holds this part of the largest one's (root of energy).
FULL_SLICE: Final = 0.3


@dataclass(frozen=True)
class Choice:
    """Outcome of the search.

    Attributes
    ----------
    strengths : dict
        Chosen values, by setting name.
    curve : list of dict
        What was tried: the strengths and their `held_out_error`.
    known, minimum : dict
        What the search began with, and where the curve is lowest.
    samples : int
        Number of samples kept out, over all coils.
    solutions : list of Solution or None
        For each plane asked, one without those samples: its final solve may begin there.
    """

    strengths: Strengths
    curve: list[dict[str, float]]
    known: Strengths
    minimum: Strengths
    samples: int
    solutions: list[Solution | None]
    groups: list[PlaneIndex] = field(default_factory=list)

    @property
    def starts(self) -> dict[PlaneIndex, Solution]:
        """Solutions by the first plane of their group."""
        pairs = zip(self.groups, self.solutions, strict=True)
        return {group: solution for group, solution in pairs if solution is not None}

    def as_dict(self) -> dict[str, Any]:
        """The report's `solver.strengths`."""
        return {
            "criterion": "held-out-samples",
            "planes": [index._asdict() for index in self.groups],
            "samples": self.samples,
            "curve": [{name: float(f"{value:.5g}") for name, value in trial.items()} for trial in self.curve],
            "known": self.known,
            "minimum": {name: float(f"{value:.4g}") for name, value in self.minimum.items()},
            "trust": LINEAR_TRUST if "tikhonov_strength" in self.known else TRUST,
            "share_trust": SHARE_TRUST if set(SPATIAL) <= set(self.known) else None,
            "chosen": self.strengths,
        }


def tune(
    preparation: Preparation,
    settings: Settings,
    groups: list[list[PlaneIndex]],
    shelf: MapShelf,
    tell: Teller,
    threads: int,
) -> tuple[Preparation, Choice | None]:
    """Put chosen strengths into the settings of a preparation, see `choose_strengths`.

    Parameters
    ----------
    preparation : Preparation
    settings : Settings
        As asked for: strengths that are `auto` are chosen.
    groups : list of list of PlaneIndex
        Planes that are solved together.
    shelf, tell, threads
        Of the main path.
    """
    names = automatic_names(settings, is_series=len(groups[0]) > 1)
    if not names or preparation.map_method is None:
        return preparation, None
    whole = _asked(preparation, groups)
    asked = [group[:FRAMES] for group in whole]
    callback = tell.search(len(asked), len(groups))
    samples = []
    for group in asked:
        maps = shelf.maps_of(group[0].slice)
        assert maps is not None
        samples.append((maps, [preparation.load(index) for index in group]))
    tell("strengths")
    choice = choose_strengths(preparation, names, samples, threads=threads, callback=callback)
    if choice is None:
        return preparation, None
    # a solution of some frames is no start for all of them
    solutions = [
        found if len(group) <= FRAMES else None for found, group in zip(choice.solutions, whole, strict=True)
    ]
    choice = replace(choice, solutions=solutions, groups=[group[0] for group in asked])
    chosen = preparation.settings.model_copy(update=choice.strengths)
    return replace(preparation, settings=chosen), choice


def _asked(preparation: Preparation, groups: list[list[PlaneIndex]]) -> list[list[PlaneIndex]]:
    """A few groups, spread over those slices that hold much of the object."""
    energy = {
        position: max(float(np.linalg.norm(block)) for block in calibration.blocks)
        for position, calibration in preparation.calibration.items()
    }
    limit = FULL_SLICE * max(energy.values())
    full = [group for group in groups if energy[group[0].slice] >= limit]
    count = min(PLANES, 1 + len(full) // PLANES_FOR_EACH)
    return [full[(2 * i + 1) * len(full) // (2 * count)] for i in range(count)]


def automatic_names(settings: Settings, *, is_series: bool) -> Names:
    """Settings that are `auto` and matter for the method."""
    if settings.method == "tikhonov":
        names: Names = ("tikhonov_strength",)
    elif settings.method == "compressed-sensing":
        names = (*SPATIAL, "temporal_strength") if is_series else SPATIAL
    else:
        names = ()
    return tuple(name for name in names if getattr(settings, name) == "auto")


def choose_strengths(
    preparation: Preparation,
    names: Names,
    samples: list[tuple[CoilMaps, list[Plane]]],
    *,
    threads: int = 1,
    callback: Callback | None = None,
) -> Choice | None:
    """Choose the strengths `names` from a few planes (or series) of a scan.

    Parameters
    ----------
    preparation : Preparation
        Its settings hold what is known beforehand for every strength.
    names : tuple of str
        Strengths to be chosen; the others stay as they are.
    samples : list of (maps, planes)
    threads : int
        Planes asked at once.
    callback : callable, optional
        Called as callback(iteration, optimality) in every iteration; raise from it to cancel.

    Returns
    -------
    Choice or None
        None where no plane has samples to spare.
    """
    rng = np.random.default_rng(0)
    asked = [make_trial(preparation, maps, planes, rng, callback or no_callback) for maps, planes in samples]
    trials = [trial for trial in asked if trial is not None]
    if not trials or not names:
        return None
    settings = preparation.settings
    known = {name: float(getattr(settings, name)) for name in names}
    search = Search(trials, threads)
    spatial = tuple(name for name in names if name != "temporal_strength")
    found = dict(known)
    if spatial:
        is_linear = spatial == ("tikhonov_strength",)
        limits = {"weakest": -LINEAR_STEPS, "strongest": LINEAR_STEPS} if is_linear else {}
        factor, tried = search.best_factor(found, spatial, **limits)
        found |= {name: known[name] * factor for name in spatial}
    if set(SPATIAL) <= set(names) and "temporal_strength" not in names:
        share = search.best_share({**found, **{name: known[name] * tried for name in spatial}})
        total = sum(found[name] for name in SPATIAL)
        found |= {"wavelet_strength": share * total, "tv_strength": (1 - share) * total}
    if "temporal_strength" in names:
        found["temporal_strength"] *= search.best_factor(found, ("temporal_strength",))[0]
    return Choice(
        # four digits, so that the report's numbers give the same image again when they are set by hand
        strengths={name: float(f"{value:.4g}") for name, value in _combined(known, found).items()},
        curve=search.curve,
        known=known,
        minimum=found,
        samples=search.samples,
        solutions=[None if trial is None else trial.start for trial in asked],
    )


def _combined(known: Strengths, found: Strengths) -> Strengths:
    """Mean of both, geometric for scales and arithmetic for the wavelet's share."""
    trust = {"tikhonov_strength": LINEAR_TRUST}
    mean = {
        name: known[name] ** (1 - trust.get(name, TRUST)) * found[name] ** trust.get(name, TRUST)
        for name in known
    }
    if set(SPATIAL) <= set(known):
        totals = [sum(of[name] for name in SPATIAL) for of in (known, found)]
        shares = [of["wavelet_strength"] / total for of, total in zip((known, found), totals, strict=True)]
        total = totals[0] ** (1 - TRUST) * totals[1] ** TRUST
        share = (1 - SHARE_TRUST) * shares[0] + SHARE_TRUST * shares[1]
        mean |= {"wavelet_strength": share * total, "tv_strength": (1 - share) * total}
    return mean
