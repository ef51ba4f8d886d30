"""The data-consistency report, as plain JSON with a versioned schema."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

from recon.caution import CAUTION
from recon.coils.findings import idle_set_findings, map_findings, noise_findings
from recon.coils.maps import MapFigures
from recon.consistency import ResidualFigures
from recon.findings import Finding
from recon.operators.wavelet import Wavelet
from recon.overfitting import least_squares_findings
from recon.preparation import Preparation
from recon.scan import PlaneIndex
from recon.statement import Solution
from recon.tuning import Choice

SCHEMA_VERSION: Final = 1
#: values of the objective kept for each plane: enough to draw the curve.
HISTORY_LENGTH: Final = 32
#: readout positions of a volume whose curve, or maps, are told, at most.
CURVES: Final = 16
POSITIONS_TOLD: Final = 64


class SolverFigures:
    """The choice of strengths, and the convergence of every plane."""

    def __init__(self, choice: Choice | None = None) -> None:
        self.choice = choice
        self.planes: list[dict[str, Any]] = []

    def see(self, group: list[PlaneIndex], solution: Solution | None) -> None:
        """Take in the solution of one plane, or of planes solved together."""
        if solution is None:
            return
        history = solution.objective
        step = max(1, -(-len(history) // HISTORY_LENGTH))
        self.planes.append(
            {
                **group[0]._asdict(),
                "frames": len(group),
                "iterations": solution.iterations,
                "stop_reason": solution.stop_reason,
                "optimality": solution.optimality,
                "objective": [float(f"{value:.7g}") for value in (*history[:-1:step], *history[-1:])],
                "objective_every": step,
            }
        )

    def as_dict(self, preparation: Preparation) -> dict[str, Any]:
        """The report's `solver`."""
        settings = preparation.settings
        return {
            "method": settings.method,
            "strengths": None if self.choice is None else self.choice.as_dict(),
            "solved_as": self._solved_as(preparation),
            "planes": self.planes if preparation.volume is None else self._of_volume(preparation),
            "converged_planes": sum(plane["stop_reason"] != "iteration-limit" for plane in self.planes),
            "iterations": sum(plane["iterations"] for plane in self.planes),
            "worst_optimality": max((plane["optimality"] for plane in self.planes), default=None),
            "tolerance": settings.tolerance,
        }

    def _solved_as(self, preparation: Preparation) -> str:
        """What each of the `planes` stands for."""
        if preparation.is_joint:
            return "volumes"
        return "series" if any(plane["frames"] > 1 for plane in self.planes) else "planes"

    def _of_volume(self, preparation: Preparation) -> list[dict[str, Any]]:
        """Planes of a volume by their place, the objective's curve of a few: a report stays small."""
        if preparation.is_joint:
            return [
                {name: value for name, value in plane.items() if name != "slice"} for plane in self.planes
            ]
        every = max(1, -(-len(self.planes) // CURVES))
        positions = []
        for number, plane in enumerate(self.planes):
            kept = {"frame": plane["frame"], "contrast": plane["contrast"], "x": plane["slice"], **plane}
            del kept["slice"]
            if number % every:
                del kept["objective"], kept["objective_every"]
            positions.append(kept)
        return positions

    def findings(self, preparation: Preparation) -> list[Finding]:
        """What the solve has to say."""
        found: list[Finding] = []
        settings = preparation.settings
        short = [plane for plane in self.planes if plane["stop_reason"] == "iteration-limit"]
        if short:
            worst = max(plane["optimality"] for plane in short)
            found.append(
                Finding(
                    "not-converged",
                    "warning",
                    f"{len(short)} of {len(self.planes)} {self._solved_as(preparation)} stopped at "
                    f"{settings.max_iterations} iterations with "
                    f"optimality {worst:.1e} above the tolerance {settings.tolerance:.1e}: raise max_iterations.",
                    "solver",
                    {"planes": len(short), "optimality": worst},
                )
            )
        uses_wavelet = settings.method == "compressed-sensing" and settings.wavelet_strength != 0
        shape = preparation.solved_shape if preparation.is_joint else preparation.shape
        pixels = " x ".join(str(n) for n in shape)
        if uses_wavelet and Wavelet(shape, settings.wavelet).levels == 0:
            found.append(
                Finding(
                    "wavelet-too-long",
                    "warning",
                    f"The wavelet {settings.wavelet} does not fit {pixels} pixels, so the wavelet penalty "
                    f"has no effect: choose a shorter one such as haar.",
                    "solver",
                )
            )
        return found


def build_report(
    preparation: Preparation,
    residuals: ResidualFigures,
    solver: SolverFigures,
    map_figures: Mapping[int, MapFigures],
    provenance: Mapping[str, Any],
) -> dict[str, Any]:
    """Put the stages' figures together.

    Parameters
    ----------
    map_figures : mapping
        How the coil maps were made, by slice.

    Returns
    -------
    dict
        Keys of the published schema: `schema_version caution findings consistency solver sampling preparation
        settings provenance`.
    """
    inspection = preparation.inspection
    scan = preparation.scan
    findings = [
        *inspection.findings,
        *noise_findings(preparation.whitening, scan.noise_attributes, scan.attributes),
        *map_findings(map_figures, "slice" if preparation.volume is None else "x"),
        *idle_set_findings(map_figures, preparation.settings.map_sets),
        *solver.findings(preparation),
        *preparation.excluded.findings(),
        *least_squares_findings(preparation.settings, float(inspection.sampling["sampled_fraction"])),
    ]
    figures = residuals.as_dict()
    if figures["reduced_chi_squared"] is not None:
        by_coil = figures["reduced_chi_squared"]["by_coil"]
        figures["reduced_chi_squared"]["by_coil"] = preparation.excluded.with_gaps(by_coil)
    if preparation.map_method is None:
        figures = {"reduced_chi_squared": None, "relative_residual": None}
    if not preparation.whitening.has_noise_units:
        findings.append(
            Finding(
                "noise-free",
                "info",
                "The scan holds no measurable noise, so strengths are fractions of the largest zero-filled image "
                "value and the residual has no noise to be compared with.",
                "/kspace",
            )
        )
    return {
        "schema_version": SCHEMA_VERSION,
        "caution": CAUTION,
        "findings": [finding.as_dict() for finding in findings],
        "consistency": figures,
        "solver": solver.as_dict(preparation),
        "sampling": inspection.sampling,
        "preparation": _preparation(preparation, map_figures),
        "settings": preparation.settings.model_dump(mode="json"),
        "provenance": dict(provenance),
    }


def _preparation(preparation: Preparation, map_figures: Mapping[int, MapFigures]) -> dict[str, Any]:
    """The stages' figures before the solve, those of each slice's maps included."""
    figures = preparation.figures()
    slices = [{"slice": position, **map_figures[position].as_dict()} for position in sorted(map_figures)]
    sources = sorted({each["source"] for each in slices})
    if preparation.volume is not None:  # a few positions tell of all
        step = -(-len(slices) // POSITIONS_TOLD) or 1
        slices = [{"x": each.pop("slice"), **each} for each in slices[::step]]
    figures["coil_maps"] |= {
        "source": "mixed" if len(sources) > 1 else sources[0] if sources else "none",
        "slices": slices,
    }
    return figures
