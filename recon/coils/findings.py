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
    """Findings about maps that leave out part of the object.

    Parameters
    ----------
    figures : mapping
        How the maps were made, by slice.
    axis : str
        What a slice is called: `x` for the readout positions of a volume.
    """
    shares = {position: each.object_share for position, each in figures.items()}
    poor = {position: share for position, share in shares.items() if share < 1 - LARGEST_SHARE_LEFT_OUT}
    if not poor:
        return []
    worst = min(poor, key=lambda position: poor[position])
    planes = "slice(s)" if axis == "slice" else f"{axis} position(s)"
    return [
        Finding(
            "maps-incomplete",
            "error" if poor[worst] == 0 else "warning",
            f"The coil maps of {len(poor)} {planes} leave out part of the object ({1 - poor[worst]:.0%} of {axis} "
            f"{worst}), and the image is zero there: sample more of the centre, try adaptive maps, or supply some.",
            f"{axis} {worst}",
            {"slices": len(poor), "smallest_share": poor[worst]},
        )
    ]
