"""One pass over a scan: is every number finite, what was sampled, what is odd about it.

The facts are plain JSON, so that the service can store them and judge a job's settings without opening the file again.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.caution import CAUTION
from recon.coils.calibration import SMALLEST_BLOCK, check_block
from recon.errors import InvalidScan, InvalidSettings
from recon.findings import Finding
from recon.formats.image_layout import voxel_size_mm
from recon.sampling import SamplingFacts, readout_finding
from recon.scan import PlaneIndex, Scan, cropped_readout
from recon.settings import Settings

#: a calibration region below this side gives coarse maps.
COMFORTABLE_BLOCK: Final = 16


@dataclass(frozen=True)
class Inspection:
    """Facts of one scan.

    Attributes
    ----------
    axes : dict
        Length of every k-space axis.
    sampling : dict
        `sampled_fraction`, `net_acceleration`, `nominal_acceleration`, `calibration` (rows, columns),
        `peak_side_lobe`, `masks` (distinct ones), `varies_along_readout`.
    objects : dict
        Which of the optional objects the scan has; the size of `/reference`.
    findings : list of Finding
    """

    axes: dict[str, int]
    sampling: dict[str, Any]
    objects: dict[str, Any]
    image: dict[str, Any]
    title: str | None
    findings: list[Finding] = field(default_factory=list)

    def as_dict(self) -> dict[str, Any]:
        """Plain JSON form."""
        return {
            "caution": CAUTION,
            "title": self.title,
            "axes": dict(self.axes),
            "sampling": self.sampling,
            "objects": self.objects,
            "image": self.image,
            "findings": [finding.as_dict() for finding in self.findings],
        }


class Inspector:
    """Looks at planes one by one; `finish` turns what it saw into an `Inspection`."""

    def __init__(self, scan: Scan) -> None:
        self.scan = scan
        self.sampling = SamplingFacts(scan.plane_shape)
        self.outside = 0
        self.outside_planes = 0
        self.empty_positions = 0
        self.empty_first: str | None = None
        self.largest = 0.0

    def see(self, index: PlaneIndex, kspace: NDArray[np.complex64], mask: NDArray[np.bool_]) -> None:
        """Take in one plane.

        Raises
        ------
        InvalidScan
            For NaN or Inf, and for a plane whose mask is all false.
        """
        where = _where(self.scan, index)
        if not np.isfinite(kspace.view(np.float32)).all():
            raise InvalidScan(
                f"/kspace contains NaN or Inf{where}; write finite numbers in single-precision range"
            )
        if not mask.any():
            what = (
                "the mask is false everywhere"
                if self.scan.mask_array is not None
                else "/kspace holds only zeros"
            )
            raise InvalidScan(f"{what}{where}; a plane needs at least one sampled position")
        self.sampling.see(mask)
        holds = np.any(kspace != 0, axis=0)
        outside = int((holds & ~mask).sum())
        self.outside += outside
        self.outside_planes += outside > 0
        empty = int((mask & ~_along_readout(holds, self.scan)).sum())
        self.empty_positions += empty
        if empty and self.empty_first is None:
            self.empty_first = where.strip(" ,") or "the plane"
        self.largest = max(self.largest, float(np.abs(kspace).max()))

    def finish(self) -> Inspection:
        """Facts and findings of everything seen.

        Raises
        ------
        InvalidScan
            When no sample of the scan differs from zero.
        """
        scan = self.scan
        if self.largest == 0.0:
            raise InvalidScan("/kspace holds only zeros; write the measured samples")
        reference = None if scan.reference_array is None else scan.reference_array.sizes
        rows, columns = scan.plane_shape[0], cropped_readout(scan)
        voxel = voxel_size_mm(scan, (rows, columns))
        return Inspection(
            axes=scan.axes,
            sampling=self.sampling.as_dict(),
            objects={
                "noise": scan.noise_array is not None,
                "mask": scan.mask_array is not None,
                "sensitivity": scan.sensitivity_array is not None,
                "reference": None if reference is None else [reference[axis] for axis in scan.plane_axes],
            },
            image={
                "axes": list(scan.image_axes),
                "matrix": [rows, columns],
                "pixel_size_mm": None if voxel is None else list(voxel),
            },
            title=scan.title,
            findings=[*scan.findings, *self._findings()],
        )

    def _findings(self) -> list[Finding]:
        scan, found = self.scan, []
        if scan.mask_array is None:
            found.append(
                Finding(
                    "mask-inferred",
                    "warning",
                    "The scan has no /mask, so positions holding only zeros count as not sampled: write /mask to be "
                    "sure.",
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
        if self.outside:
            found.append(
                Finding(
                    "samples-outside-mask",
                    "info",
                    f"{self.outside} positions hold samples outside the mask and are ignored: intended when "
                    f"undersampling retrospectively, else correct /mask.",
                    "/mask",
                    {"positions": self.outside, "planes": self.outside_planes},
                )
            )
        if self.empty_positions:
            found.append(
                Finding(
                    "sampled-zeros",
                    "warning",
                    f"{self.empty_positions} positions that the mask calls sampled hold only zeros, first in "
                    f"{self.empty_first}: correct /mask, or leave it out to have it inferred.",
                    "/kspace",
                    {"positions": self.empty_positions},
                )
            )
        found.extend(readout_finding(self.sampling, scan.plane_axes))
        found.extend(self._calibration_finding())
        return found

    def _calibration_finding(self) -> list[Finding]:
        rows, columns = self.sampling.calibration
        is_small = any(
            min(COMFORTABLE_BLOCK, n) > have
            for n, have in zip(self.scan.plane_shape, (rows, columns), strict=True)
        )
        if (
            self.scan.coils == 1
            or self.scan.reference_array is not None
            or self.scan.sensitivity_array is not None
        ):
            return []
        if not is_small:
            return []
        return [
            Finding(
                "calibration-small",
                "warning",
                f"The fully sampled centre of k-space is {rows} x {columns}; coil maps want {COMFORTABLE_BLOCK} or "
                f"more a side, and need {SMALLEST_BLOCK}: sample more of the centre, add /reference or supply maps.",
                "/mask",
                {"rows": rows, "columns": columns},
            )
        ]


def _along_readout(holds: NDArray[np.bool_], scan: Scan) -> NDArray[np.bool_]:
    # zeros inside a measured readout are values; only a readout that is zero throughout was not written
    if scan.plane_axes[1] != "kx":
        return holds
    return np.broadcast_to(holds.any(axis=1, keepdims=True), holds.shape)


def _where(scan: Scan, index: PlaneIndex) -> str:
    parts = [f"{axis} {position}" for axis, position in index._asdict().items() if axis in scan.axes]
    return f" in {', '.join(parts)}" if parts else ""


def inspect(scan: Scan, progress: Callable[[float], None] | None = None) -> Inspection:
    """Read a whole scan once and report what is in it.

    Parameters
    ----------
    scan : Scan
    progress : callable, optional
        Called with the fraction done, after each plane.

    Returns
    -------
    Inspection

    Raises
    ------
    InvalidScan
        For content that cannot be reconstructed: NaN or Inf, all-false masks, nothing but zeros.
    """
    inspector = Inspector(scan)
    planes = scan.planes()
    for done, index in enumerate(planes, start=1):
        kspace = scan.kspace(index)
        inspector.see(index, kspace, scan.mask(index, kspace))
        if progress is not None:
            progress(done / len(planes))
    for name, array in (
        ("/noise", scan.noise_array),
        ("/reference", scan.reference_array),
        ("/sensitivity", scan.sensitivity_array),
    ):
        for position in range(
            scan.axes.get("slice", 1) if array is not None and "slice" in array.axes else 1
        ):
            if array is not None and not np.isfinite(array.take(slice=position).view(np.float32)).all():
                raise InvalidScan(
                    f"{name} contains NaN or Inf; write finite numbers in single-precision range"
                )
    return inspector.finish()


def check_job(facts: Mapping[str, Any], settings: Settings) -> None:
    """Refuse settings that cannot work with a scan, before any time is spent on it.

    Parameters
    ----------
    facts : mapping
        `Inspection.as_dict()` of the scan.
    settings : Settings

    Raises
    ------
    CalibrationMissing
        When the settings need coil maps and there is nothing to compute them from.
    InvalidSettings
        For more virtual coils than coils, or supplied maps that are not there.
    """
    coils = int(facts["axes"].get("coil", 1))
    rule = settings.coil_compression
    wanted = getattr(rule, "coils", None)
    if wanted is not None and wanted > coils:
        raise InvalidSettings(
            [
                {
                    "pointer": "/coil_compression",
                    "detail": f"received {wanted} coils for a scan with {coils}; accepted is up to that",
                }
            ]
        )
    has_maps = bool(facts["objects"]["sensitivity"])
    if settings.coil_maps == "supplied" and not has_maps:
        raise InvalidSettings(
            [
                {
                    "pointer": "/coil_maps",
                    "detail": "received supplied, but the scan has no /sensitivity; add maps or choose eigenvector",
                }
            ]
        )
    if not needs_maps(settings, coils) or (has_maps and settings.coil_maps in ("auto", "supplied")):
        return
    matrix = tuple(facts["image"]["matrix"])
    if facts["objects"]["reference"] is not None:
        rows, columns = facts["objects"]["reference"]
        check_block(rows, columns, (matrix[0], matrix[1]), "/reference")
    else:
        rows, columns = (facts["sampling"]["calibration"][side] for side in ("rows", "columns"))
        check_block(rows, columns, (matrix[0], matrix[1]), "the scan")


def needs_maps(settings: Settings, coils: int) -> bool:
    """Whether a reconstruction with these settings uses coil maps at all."""
    is_coilwise = settings.method == "zero-filled" and settings.combination == "root-sum-of-squares"
    return coils > 1 and not is_coilwise
