"""Facts about what was sampled: accelerations, calibration region, point-spread function."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.coils.calibration import SMALLEST_BLOCK, central_block, prefers_time_average
from recon.findings import Finding
from recon.scan import PlaneIndex

#: a calibration region below this side gives coarse maps.
COMFORTABLE_BLOCK: Final = 16


class SamplingFacts:
    """Gathers the masks of a scan, plane by plane.

    Parameters
    ----------
    shape : (rows, columns)
        Of a plane.
    averages : int
        How often each plane was measured at most.
    """

    def __init__(self, shape: tuple[int, int], averages: int = 1) -> None:
        self.shape = shape
        self.averages = averages
        self.positions = 0
        self.sampled = 0
        self.samples = 0
        self.fewest, self.most = 0, 0
        self.calibration = shape
        self.peak_side_lobe = 0.0
        #: positions along each axis where any plane has measured anything.
        self.covered = tuple(np.zeros(n, np.bool_) for n in shape)
        self.varies_along_columns = False
        self.is_partial_echo = True
        self._nominal: list[float] = []
        self._seen: set[bytes] = set()

    @property
    def mean_count(self) -> float:
        """Samples behind a sampled position, in the mean."""
        return self.samples / max(self.sampled, 1)

    def see(self, counts: NDArray[Any]) -> None:
        """Take in one plane: how often each position was measured (or a mask)."""
        self.count(counts)
        self.judge(np.asarray(counts > 0))

    def count(self, counts: NDArray[Any]) -> None:
        """Add up positions and samples of any part of k-space."""
        mask = np.asarray(counts > 0)
        self.positions += mask.size
        self.sampled += int(mask.sum())
        self.samples += int(counts.sum())
        if mask.any():
            fewest = int(counts[mask].min())
            self.fewest = min(self.fewest or fewest, fewest)
            self.most = max(self.most, int(counts.max()))

    def judge(self, mask: NDArray[np.bool_], block: tuple[int, ...] | None = None) -> None:
        """Take in the pattern of one plane, or of a volume with the sides of its calibration block."""
        key = np.packbits(mask).tobytes()
        if key in self._seen:
            return
        self._seen.add(key)
        for axis, covered in enumerate(self.covered):
            covered |= mask.any(axis=tuple(other for other in range(mask.ndim) if other != axis))
        block = central_block(mask) if block is None else block
        rows, columns = block[:2]
        if rows * columns < self.calibration[0] * self.calibration[1] or len(self._seen) == 1:
            self.calibration = (rows, columns)
        self.peak_side_lobe = max(self.peak_side_lobe, peak_side_lobe(mask))
        self._nominal.append(_acceleration_outside(mask, block))
        if not (mask == mask[..., :1]).all():
            self.varies_along_columns = True
            self.is_partial_echo = self.is_partial_echo and is_partial_echo(mask)

    def as_dict(self) -> dict[str, Any]:
        """Plain JSON form."""
        total = self.positions
        return {
            "sampled_fraction": self.sampled / total,
            "net_acceleration": total * self.averages / self.samples,
            "nominal_acceleration": float(np.mean(self._nominal)),
            "calibration": {"rows": int(self.calibration[0]), "columns": int(self.calibration[1])},
            "peak_side_lobe": self.peak_side_lobe,
            "distinct_masks": len(self._seen),
            "varies_along_readout": self.varies_along_columns,
            "samples_per_position": {"fewest": self.fewest, "most": self.most, "mean": self.mean_count},
        }


class FrameUnion:
    """The calibration region of the time average: of all positions that any frame of a slice and contrast sampled.

    Planes come slice by slice, and only the current slice's masks are held.
    """

    def __init__(self) -> None:
        self._slice = 0
        self._masks: dict[int, NDArray[np.bool_]] = {}
        self._smallest: tuple[int, int] | None = None

    def see(self, index: PlaneIndex, mask: NDArray[np.bool_]) -> None:
        """Take in one plane's mask."""
        if index.slice != self._slice:
            self._close()
            self._slice = index.slice
        known = self._masks.get(index.contrast)
        self._masks[index.contrast] = mask if known is None else known | mask

    def _close(self) -> None:
        for mask in self._masks.values():
            sides = central_block(mask)
            if self._smallest is None or sides[0] * sides[1] < self._smallest[0] * self._smallest[1]:
                self._smallest = sides
        self._masks = {}

    def as_dict(self) -> dict[str, int] | None:
        """Rows and columns of the worst slice; None where nothing was seen."""
        self._close()
        if self._smallest is None:
            return None
        return {"rows": int(self._smallest[0]), "columns": int(self._smallest[1])}


def peak_side_lobe(mask: NDArray[np.bool_]) -> float:
    """Peak side-lobe of the point-spread function: max |F^-1 P|(r != 0) / |F^-1 P|(0) (Lustig et al. 2007)."""
    # a real array's spectrum is symmetric, so that half of it shows every magnitude; single precision keeps it small
    dtype = np.float64 if mask.ndim == 2 else np.float32
    spread = np.abs(scipy.fft.rfftn(mask.astype(dtype)))
    peak = float(spread.flat[0])
    spread.flat[0] = 0
    return float(spread.max()) / peak if peak > 0 else 0.0


def _acceleration_outside(mask: NDArray[np.bool_], block: tuple[int, ...]) -> float:
    """Positions over samples, leaving the calibration block out (1 where nothing is left)."""
    outside = np.ones(mask.shape, np.bool_)
    first = (n // 2 - k // 2 for n, k in zip(mask.shape, block, strict=True))
    outside[tuple(slice(start, start + k) for start, k in zip(first, block, strict=True))] = False
    sampled = int((mask & outside).sum())
    return float(outside.sum()) / sampled if sampled else 1.0


def is_partial_echo(mask: NDArray[np.bool_]) -> bool:
    """Whether every sampled line has the same single run of columns, which contains DC."""
    lines = mask[mask.any(axis=-1)]
    run = lines[0]
    edges = int(np.count_nonzero(np.diff(np.concatenate(([0], run.astype(np.int8), [0])))))
    return bool((lines == run).all() and edges == 2 and run[mask.shape[-1] // 2])


def readout_finding(facts: SamplingFacts, plane_axes: tuple[str, str]) -> list[Finding]:
    """The finding about a mask that varies along `kx`, if it does."""
    if plane_axes[1] != "kx" or not facts.varies_along_columns:
        return []
    if facts.is_partial_echo:
        return [
            Finding(
                "partial-echo",
                "info",
                "The mask leaves out part of every readout (partial echo): resolution along x is lower than the "
                'matrix says; where the phase is smooth, set constraint to "real" to fill in detail.',
                "/mask",
            )
        ]
    return [
        Finding(
            "readout-undersampled",
            "warning",
            "The mask varies along kx, which no scanner can do: fine for a study, but do not read acquisition "
            "times from it.",
            "/mask",
        )
    ]


def averages_finding(facts: SamplingFacts) -> list[Finding]:
    """The finding about repeated measurements, if there are any."""
    numbers = {"fewest": facts.fewest, "most": facts.most, "mean": facts.mean_count}
    if facts.most <= 1:
        return []
    if facts.fewest == facts.most:
        return [
            Finding(
                "averages-combined",
                "info",
                f"Every sampled position was measured {facts.most} times: the image is made of the means, so keep "
                f"averages apart as frames if something moved between them.",
                "/kspace",
                numbers,
            )
        ]
    return [
        Finding(
            "averages-unequal",
            "info",
            f"Sampled positions were measured {facts.fewest} to {facts.most} times: their means count with the square "
            f"root of that number, so keep averages apart as frames if something moved between them.",
            "/kspace",
            numbers,
        )
    ]


def calibration_findings(
    single: tuple[int, int], time_average: Mapping[str, int] | None, shape: tuple[int, int]
) -> list[Finding]:
    """Findings about the region that coil maps are computed from.

    Parameters
    ----------
    single : (rows, columns)
        Fully sampled centre of the worst plane.
    time_average : mapping or None
        See `FrameUnion.as_dict`.
    shape : (rows, columns)
        Of a plane.
    """
    rows, columns = single
    found = []
    average = (0, 0) if time_average is None else (time_average["rows"], time_average["columns"])
    if prefers_time_average(single, average):
        rows, columns = average
        found.append(
            Finding(
                "calibration-time-average",
                "info",
                f"The frames together sample a centre of {rows} x {columns}, one alone {single[0]} x {single[1]}, so "
                f"coil maps come from the mean over the frames: keep the coils in place from frame to frame.",
                "/mask",
                {"rows": rows, "columns": columns},
            )
        )
    sides = zip(shape, (rows, columns), strict=True)
    if any(have < min(COMFORTABLE_BLOCK, n) for n, have in sides):
        found.append(
            Finding(
                "calibration-small",
                "warning",
                f"The fully sampled centre of k-space is {rows} x {columns}; coil maps want {COMFORTABLE_BLOCK} or "
                f"more a side, and need {SMALLEST_BLOCK}: sample more of the centre, add /reference or supply maps.",
                "/mask",
                {"rows": rows, "columns": columns},
            )
        )
    return found
