"""What the noise scan and the coil maps have to say about themselves."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

from recon.coils.maps import MapFigures
from recon.coils.noise import Whitening
from recon.findings import Finding

#: a noise scan with fewer samples for each coil than this makes noise units uncertain by more than about 5 %.
COMFORTABLE_SAMPLES: Final = 10
#: maps that leave out more than this share of the object are reported.
LARGEST_SHARE_LEFT_OUT: Final = 0.15
#: a second eigenvalue as large as the first in more than this share of the object is reported.
SIZEABLE_FOLD: Final = 0.06


def noise_findings(
    whitening: Whitening, noise_attributes: Mapping[str, Any], image_attributes: Mapping[str, Any]
) -> list[Finding]:
    """Findings about `/noise` and how it was used."""
    found: list[Finding] = []
    coils, samples = len(whitening.covariance), whitening.samples
    if whitening.source == "noise-scan" and samples < COMFORTABLE_SAMPLES * coils:
        found.append(
            Finding(
                "noise-short",
                "warning",
                f"/noise has {samples} samples for {coils} coils, so that noise units are uncertain: write at least "
                f"{COMFORTABLE_SAMPLES * coils}.",
                "/noise",
                {"samples": samples, "coils": coils},
            )
        )
    if whitening.clamped:
        found.append(
            Finding(
                "noise-clamped",
                "warning",
                f"{whitening.clamped} coil(s), or sums of coils, have next to no noise beside the others: look for "
                f"a dead, duplicated or differently scaled coil.",
                "/noise",
                {"directions": whitening.clamped},
            )
        )
    times = "sample_time_us" in noise_attributes, "sample_time_us" in image_attributes
    if whitening.source == "noise-scan" and times[0] != times[1]:
        having, lacking = ("/noise", "/kspace") if times[0] else ("/kspace", "/noise")
        found.append(
            Finding(
                "dwell-time-incomplete",
                "warning",
                f"{having} has the attribute sample_time_us, {lacking} has not, so that the noise is taken as measured "
                f"at the image's dwell time: write both or neither.",
                lacking,
            )
        )
    return found


def map_findings(figures: Mapping[int, MapFigures], axis: str = "slice") -> list[Finding]:
    """Findings about maps that leave out part of the object, or have one set where two are needed, or the reverse.

    Parameters
    ----------
    figures : mapping
        How the maps were made, by slice.
    axis : str
        What a slice is called: `x` for the readout positions of a volume.
    """
    planes = "slice(s)" if axis == "slice" else "readout position(s)"
    shares = {position: each.object_share for position, each in figures.items()}
    poor = {position: share for position, share in shares.items() if share < 1 - LARGEST_SHARE_LEFT_OUT}
    found: list[Finding] = []
    if poor:
        worst = min(poor, key=lambda position: poor[position])
        is_supplied = figures[worst].source == "supplied"
        remedy = (
            "correct /sensitivity or leave it out"
            if is_supplied
            else "sample more of the centre, try adaptive maps, or supply some"
        )
        found.append(
            Finding(
                "maps-incomplete",
                "error" if poor[worst] == 0 else "warning",
                f"The coil maps of {len(poor)} {planes} leave out part of the object ({1 - poor[worst]:.0%} of {axis} "
                f"{worst}), and the image is zero there: {remedy}.",
                f"{axis} {worst}",
                {"slices": len(poor), "smallest_share": poor[worst]},
            )
        )
    folds = {p: each.folded_share for p, each in figures.items() if each.folded_share is not None}
    folded = {p: fold for p, fold in folds.items() if fold > SIZEABLE_FOLD and figures[p].sets == 1}
    if folded:
        most = max(folded, key=lambda position: folded[position])
        found.append(
            Finding(
                "object-exceeds-field-of-view",
                "warning",
                f"In {len(folded)} {planes} one set of coil maps does not explain the calibration data "
                f"({folded[most]:.0%} of the object in {axis} {most}), as when the object exceeds the field of view "
                f"and folds onto itself: set map_sets to 2, or measure a larger field of view.",
                f"{axis} {most}",
                {"slices": len(folded), "largest_share": folded[most]},
            )
        )
    return found


def idle_set_findings(figures: Mapping[int, MapFigures], wanted: int) -> list[Finding]:
    """The finding that a second set of maps, asked for, is zero in every slice."""
    if wanted == 1 or any(each.sets > 1 for each in figures.values()):
        return []
    return [
        Finding(
            "second-map-set-empty",
            "info",
            "map_sets is 2, but nowhere does the object fold onto itself, so that one set was used: set map_sets to 1.",
            "/map_sets",
        )
    ]
