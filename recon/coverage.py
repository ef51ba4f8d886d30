"""How far out k-space was measured along each axis: partial Fourier, partial echo, resolution.

    pixel size = FOV / N,   FOV = 1 / delta_k,   resolution = 1 / (2 k_max)

(Bracewell, The Fourier Transform and Its Applications.) k_max is counted from the middle of the matrix to the outer
edge of the outermost cell that was measured, so that a complete axis has k_max = N delta_k / 2 on both sides, N odd or
even, and its resolution is the pixel size.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from recon.findings import Finding

#: were both sides sampled at random alike, so many outermost lines would fall on one side in less than 1 % of scans.
LONE_LINES: Final = 8
#: outermost spacings that are equal in a regular mask, and by chance in less than 1 % of random ones.
EVEN_DENSE: Final = 5
EVEN_SPARSE: Final = 3
#: coverage of less than this share of a symmetric axis counts as partial.
COMPLETE_SHARE: Final = 0.95

Side = Literal["negative", "positive"]


@dataclass(frozen=True)
class Coverage:
    """One axis.

    Attributes
    ----------
    size : int
        N, positions along the axis.
    negative, positive : float
        k_max on either side of the centre, in units of delta_k.
    missing : {"negative", "positive"} or None
        The side that was cut short on purpose, as far as the mask tells.
    """

    size: int
    negative: float
    positive: float
    missing: Side | None

    @property
    def fraction(self) -> float:
        """Share that was covered of the axis with two sides as long as the longer one."""
        return (self.negative + self.positive) / (2 * max(self.negative, self.positive))

    def resolution_mm(self, field_of_view: float) -> dict[str, float]:
        """Pixel size, and resolution of the side that was measured farther out and of the other one, in mm."""
        sides = self.negative, self.positive
        return {
            "pixel_mm": field_of_view / self.size,
            "longer_side_mm": field_of_view / (2 * max(sides)),
            "shorter_side_mm": field_of_view / (2 * min(sides)),
        }


def coverage(sampled: NDArray[np.bool_]) -> Coverage:
    """Coverage of one axis from the positions along it where anything was measured.

    A side counts as cut short when the other side goes on with evenly spaced lines, or with more of them than chance
    would put there.

    Parameters
    ----------
    sampled : bool (positions)
        At least one True.
    """
    size = len(sampled)
    at = np.flatnonzero(sampled)
    negative, positive = size / 2 - int(at[0]), int(at[-1]) + 1 - size / 2
    # a mask that misses the centre has one side of no length: then half a cell, so that its resolution is finite
    negative, positive = max(negative, 0.5), max(positive, 0.5)
    found = Coverage(size, negative, positive, None)
    if found.fraction > COMPLETE_SHARE or len(at) == 1:
        return found
    distance = np.abs(at - (size - 1) / 2) + 0.5
    beyond = int((distance > min(negative, positive)).sum())
    # where lines are evenly spaced up to the end, two of them in a row on one side alone are no chance
    spacing = np.diff(at)[:: 1 if negative > positive else -1]
    is_even = bool((spacing[: EVEN_DENSE if spacing[0] <= 2 else EVEN_SPARSE] == spacing[0]).all())
    is_cut = is_even and beyond >= 2 and size / 2 - min(negative, positive) > 1.5 * spacing[0]
    if beyond >= LONE_LINES or is_cut:
        return Coverage(size, negative, positive, "negative" if negative < positive else "positive")
    return found


def coverage_facts(found: dict[str, Coverage], fields_mm: dict[str, float] | None) -> dict[str, Any]:
    """The report's `sampling.partial_fourier` and `sampling.resolution`.

    Parameters
    ----------
    found : dict
        Coverage by k-space axis.
    fields_mm : dict or None
        Encoded field of view by k-space axis.
    """
    partial = {
        axis: {"fraction": each.fraction, "missing": each.missing}
        for axis, each in found.items()
        if each.missing is not None
    }
    resolution = None
    if fields_mm is not None:
        resolution = {axis: each.resolution_mm(fields_mm[axis]) for axis, each in found.items()}
    return {"partial_fourier": partial, "resolution": resolution}


def partial_fourier_findings(found: dict[str, Coverage]) -> list[Finding]:
    """One finding for each phase-encode axis of which one side was cut short (for a readout see `partial-echo`)."""
    return [
        Finding(
            "partial-fourier",
            "info",
            f"The {each.missing} side of {axis} was measured only out to {_short(each) / _long(each):.0%} of the other "
            f"(partial Fourier, {each.fraction:.0%} of the axis): detail beyond that is blurred along {axis[1:]}; "
            f'where the phase is smooth, set constraint to "real" to fill it in.',
            f"/mask {axis}",
            {"fraction": each.fraction},
        )
        for axis, each in found.items()
        if each.missing is not None and axis != "kx"
    ]


def _short(found: Coverage) -> float:
    return min(found.negative, found.positive)


def _long(found: Coverage) -> float:
    return max(found.negative, found.positive)
