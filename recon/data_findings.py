"""Findings about mask, noise and samples as they lie in the file."""

from __future__ import annotations

from recon.findings import Finding
from recon.scan import Scan


def absence_findings(scan: Scan) -> list[Finding]:
    """What the scan does not have, and what is done instead."""
    found: list[Finding] = []
    if scan.mask_array is None:
        found.append(
            Finding(
                "mask-inferred",
                "warning",
                "The scan has no /mask, so positions holding only zeros count as not sampled: write /mask to be sure.",
                "/mask",
            )
        )
    if scan.noise_array is None:
        found.append(
            Finding(
                "noise-missing",
                "warning",
                "The scan has no /noise, so the noise is estimated from the k-space periphery and the residual "
                "cannot be judged against it: add noise-only readouts.",
                "/noise",
            )
        )
    return found


def mask_findings(outside: int, outside_planes: int, empty: int, first_empty: str | None) -> list[Finding]:
    """Where mask and samples do not go together.

    Parameters
    ----------
    outside, outside_planes : int
        Positions that hold samples outside the mask, and planes with any.
    empty : int
        Positions that the mask calls sampled, but hold only zeros.
    first_empty : str or None
        Where the first of these is.
    """
    found: list[Finding] = []
    if outside:
        found.append(
            Finding(
                "samples-outside-mask",
                "info",
                f"{outside} positions hold samples outside the mask and are ignored: intended when undersampling "
                f"retrospectively, else correct /mask.",
                "/mask",
                {"positions": outside, "planes": outside_planes},
            )
        )
    if empty:
        found.append(
            Finding(
                "sampled-zeros",
                "warning",
                f"{empty} positions that the mask calls sampled hold only zeros, first in {first_empty}: correct "
                f"/mask, or leave it out to have it inferred.",
                "/kspace",
                {"positions": empty},
            )
        )
    return found
