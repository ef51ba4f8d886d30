"""One pass over a scan: is every number finite, what was sampled, what is odd about it.

The facts are plain JSON, so that the service can store them and judge a job's settings without opening the file again.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.averages import Mean, Samples
from recon.axes import LabelledArray
from recon.caution import CAUTION
from recon.coverage import Coverage, coverage, coverage_facts, partial_fourier_findings
from recon.data_findings import absence_findings, mask_findings
from recon.errors import InvalidScan
from recon.findings import Finding
from recon.formats.image_layout import voxel_size_mm
from recon.grid import image_grid
from recon.levels import ChannelLevels
from recon.repeatability import Scatter, scatter_findings
from recon.sampling import (
    FrameUnion,
    SamplingFacts,
    averages_finding,
    calibration_findings,
    readout_finding,
)
from recon.scan import PlaneIndex, Scan, cropped_readout, readout_pattern
from recon.scan_checks import check_finite
from recon.spikes import SpikeCount, find_spikes

#: magnitudes of k-space that single-precision arithmetic can square without harm.
SMALLEST_VALUE: Final = 1e-15
LARGEST_VALUE: Final = 1e15


@dataclass(frozen=True)
class Inspection:
    """Facts of one scan.

    Attributes
    ----------
    axes : dict
        Length of every k-space axis.
    sampling : dict
        `sampled_fraction` (of the positions), `net_acceleration` (positions of all averages over samples),
        `readouts` (of all planes and averages), `scatter_over_noise` (of averages, in variance),
        `nominal_acceleration`, `calibration` (rows, columns), `time_average_calibration` (of all frames together; null
        without frames), `peak_side_lobe`, `distinct_masks`,
        `varies_along_readout` (or along the columns of a phase-phase plane), `samples_per_position` (averages),
        `partial_fourier`, `resolution` in mm by axis (null where the field of view is unknown).
    objects : dict
        Which of the optional objects the scan has; rows and columns of `/reference` and `/sensitivity` (of a volume
        kz and ky of the one, z, y and x of the other), those of the reference without readout oversampling where the
        scan is solved without it.
    channels : dict
        Positions of coils that are `dead`, or `silent_in_noise`.
    findings : list of Finding
    """

    axes: dict[str, int]
    sampling: dict[str, Any]
    objects: dict[str, Any]
    image: dict[str, Any]
    channels: dict[str, list[int]]
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
            "channels": self.channels,
            "findings": [finding.as_dict() for finding in self.findings],
        }


class Inspector:
    """Reads planes one by one and looks at each average; `finish` turns what it saw into an `Inspection`."""

    def __init__(self, scan: Scan) -> None:
        self.scan = scan
        self.source = scan  # read plane by plane
        self.sampling = SamplingFacts(scan.plane_shape, scan.averages)
        self.union = FrameUnion() if scan.axes.get("frame", 1) > 1 else None
        self.readouts = 0
        self.outside = 0
        self.outside_planes = 0
        self.empty_positions = 0
        self.empty_first: str | None = None
        self.largest = 0.0
        self.levels = ChannelLevels(scan.coils)
        self.spikes = SpikeCount(scan.plane_axes)
        self.scatter = Scatter(scan.coils)

    def read(self, index: PlaneIndex) -> Samples:
        """Read one plane, look at it, and return the mean of its averages.

        Raises
        ------
        InvalidScan
            For NaN or Inf, and for a plane without any sampled position.
        """
        mean, before = Mean(), self.levels.energy.copy()
        for average, (kspace, mask) in enumerate(self.source.each_average(index)):
            self._see(index, average, kspace, mask)
            mean.add(kspace, mask)
        samples = mean.finish()
        self._count(index, samples)
        if self.scan.averages > 1 and self.largest <= LARGEST_VALUE:
            self.scatter.see(self.levels.energy - before, samples)
        return samples

    def _count(self, index: PlaneIndex, samples: Samples) -> None:
        """Take in how often the positions of one plane were measured."""
        if not samples.mask.any():
            raise InvalidScan(
                f"{self._nothing()}{self._where(index)}; a plane needs at least one sampled position"
            )
        self.sampling.see(samples.counts)
        if self.union is not None:
            self.union.see(index, samples.mask)
        per_line = samples.counts.max(axis=1) if self.scan.plane_axes[1] == "kx" else samples.counts
        self.readouts += int(per_line.sum())

    def _nothing(self) -> str:
        has_mask = self.scan.mask_array is not None
        return "the mask is false everywhere" if has_mask else "/kspace holds only zeros"

    def _where(self, index: PlaneIndex, average: int | None = None) -> str:
        place = {**index._asdict(), **({} if average is None else {"average": average})}
        parts = [f"{axis} {position}" for axis, position in place.items() if axis in self.scan.axes]
        return f" in {', '.join(parts)}" if parts else ""

    def _along_readout(self, holds: NDArray[np.bool_]) -> NDArray[np.bool_]:
        # zeros inside a measured readout are values; a readout, or a column of all of them, zero throughout is not
        return holds if self.scan.plane_axes[1] != "kx" else readout_pattern(holds)

    def _see(
        self, index: PlaneIndex, average: int, kspace: NDArray[np.complex64], mask: NDArray[np.bool_]
    ) -> None:
        """Take in one average of one plane."""
        where = self._where(index, average)
        if not np.isfinite(kspace.view(np.float32)).all():
            raise InvalidScan(
                f"/kspace contains NaN or Inf{where}; write finite numbers in single-precision range"
            )
        holds = np.any(kspace != 0, axis=0)
        outside = int((holds & ~mask).sum())
        self.outside += outside
        self.outside_planes += outside > 0
        empty = int((mask & ~self._along_readout(holds)).sum())
        self.empty_positions += empty
        if empty and self.empty_first is None:
            self.empty_first = where.strip(" ,") or "the plane"
        self.largest = max(self.largest, float(np.abs(kspace).max()))
        if self.largest <= LARGEST_VALUE:  # else refused in the end, and squares would overflow
            self.levels.see(kspace, mask)
            self.spikes.see(where.removeprefix(" in "), find_spikes(kspace, mask))

    def finish(self) -> Inspection:
        """Facts and findings of everything seen.

        Raises
        ------
        InvalidScan
            When no sample of the scan differs from zero.
        """
        scan = self.scan
        self._time_average = None if self.union is None else self.union.as_dict()
        if self.largest == 0.0:
            raise InvalidScan("/kspace holds only zeros; write the measured samples")
        if not SMALLEST_VALUE <= self.largest <= LARGEST_VALUE:
            raise InvalidScan(
                f"the largest value of /kspace is {self.largest:.1e}; accepted is {SMALLEST_VALUE:g} to "
                f"{LARGEST_VALUE:g}: multiply /kspace and /noise by one factor that brings it near 1"
            )
        check_finite(scan)
        channels = self.levels.judge(scan.noise())
        scatter = self.scatter.over_noise(scan)
        grid = image_grid(scan)
        encoded = scan.plane_shape[1]
        solved = encoded if self.sampling.varies_along_columns or scan.is_volume else cropped_readout(scan)
        reference = _matrix(scan.reference_array, scan.plane_axes)
        if reference is not None:
            reference[1] = max(1, round(reference[1] * solved / encoded))
        return Inspection(
            axes=scan.axes,
            sampling={
                **self.sampling.as_dict(),
                "time_average_calibration": self._time_average,
                "readouts": self.readouts,
                "scatter_over_noise": scatter,
                **coverage_facts(self._coverage(), _fields_mm(scan)),
            },
            objects={
                "noise": scan.noise_array is not None,
                "mask": scan.mask_array is not None,
                "sensitivity": _matrix(scan.sensitivity_array, grid.axes),
                "reference": reference,
            },
            image={
                "axes": list(scan.image_axes),
                "matrix": list(grid.written),
                "solved_plane": [scan.plane_shape[0], solved],
                "pixel_size_mm": voxel_size_mm(scan, grid),
            },
            channels=channels.as_dict(),
            title=scan.title,
            findings=[
                *scan.findings,
                *self._findings(),
                *scatter_findings(scatter),
                *channels.findings(),
                *self.spikes.findings(),
            ],
        )

    def _coverage(self) -> dict[str, Coverage]:
        pairs = zip(self.scan.plane_axes, self.sampling.covered, strict=True)
        return {axis: coverage(covered) for axis, covered in pairs}

    def _findings(self) -> list[Finding]:
        scan = self.scan
        found = absence_findings(scan)
        found += mask_findings(self.outside, self.outside_planes, self.empty_positions, self.empty_first)
        found.extend(averages_finding(self.sampling))
        found.extend(readout_finding(self.sampling, scan.plane_axes))
        found.extend(partial_fourier_findings(self._coverage()))
        needs_calibration = scan.coils > 1 and scan.reference_array is None and scan.sensitivity_array is None
        if needs_calibration:
            found.extend(
                calibration_findings(self.sampling.calibration, self._time_average, scan.plane_shape)
            )
        return found


def _matrix(array: LabelledArray | None, axes: tuple[str, ...]) -> list[int] | None:
    return None if array is None else [array.sizes[axis] for axis in axes]


def _fields_mm(scan: Scan) -> dict[str, float] | None:
    """Encoded field of view by k-space axis."""
    fields = scan.attributes.get("field_of_view_mm")
    return None if fields is None else dict(zip(("kx", "ky", "kz"), fields, strict=True))


def inspector_of(scan: Scan) -> Inspector:
    """The inspector that fits a scan of planes or of volumes."""
    from recon.volume_inspection import VolumeInspector  # a kind of Inspector itself

    return VolumeInspector(scan) if scan.is_volume else Inspector(scan)


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
    inspector = inspector_of(scan)
    planes = inspector.source.planes()
    for done, index in enumerate(planes, start=1):
        inspector.read(index)
        if progress is not None:
            progress(done / len(planes))
    return inspector.finish()
