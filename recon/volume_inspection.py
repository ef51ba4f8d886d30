"""Inspection of a volume: one pass, slab by slab, and what was sampled in the plane of its phase encodes."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.averages import Samples
from recon.coils.calibration import LARGEST_BLOCK, SMALLEST_BLOCK, central_block
from recon.coverage import Coverage, coverage
from recon.errors import InvalidScan
from recon.findings import Finding
from recon.inspection import Inspection, Inspector
from recon.sampling import is_partial_echo, readout_finding
from recon.scan import PlaneIndex, Scan
from recon.spikes import SpikeCount
from recon.volume import Key, slabs


class Pattern:
    """What was sampled of one volume.

    Attributes
    ----------
    lines : int (kz, ky)
        How often each line was measured, at its most measured sample.
    full : bool (kz, ky, kx) or None
        The mask, where it varies along `kx`.
    """

    def __init__(self, shape: tuple[int, int], columns: int) -> None:
        self.lines = np.zeros(shape, np.int64)
        self.full: NDArray[np.bool_] | None = None
        self.columns = columns

    def see(self, kz: int, counts: NDArray[Any]) -> None:
        """Take in one slab, int (ky, kx)."""
        self.lines[kz] = counts.max(axis=1)
        if self.full is None and not (counts == counts[:, :1]).all():
            self.full = np.repeat(self.lines[..., np.newaxis] > 0, self.columns, axis=2)
        if self.full is not None:
            self.full[kz] = counts > 0

    def sampled(self, columns: NDArray[np.bool_]) -> int:
        """Positions that the mask calls sampled, in some columns."""
        if self.full is not None:
            return int(self.full[..., columns].sum())
        return int(np.count_nonzero(self.lines)) * int(columns.sum())

    def calibration(self) -> tuple[int, int, int]:
        """Sides (kz, ky, kx) of the fully sampled block about the centre."""
        return (
            central_volume(self.lines > 0, self.columns) if self.full is None else central_volume(self.full)
        )


def central_volume(mask: NDArray[np.bool_], columns: int | None = None) -> tuple[int, int, int]:
    """Sides of the fully sampled block about DC: of (kz, ky, kx), or of (kz, ky) with complete readouts."""
    if columns is not None:
        return (*central_block(mask), columns)
    best = (0, 0, 0)
    most = min(LARGEST_BLOCK, mask.shape[2])
    for width in range(most, min(SMALLEST_BLOCK, most) - 1, -1):
        start = mask.shape[2] // 2 - width // 2
        plane = np.asarray(mask[..., start : start + width].all(axis=2))
        sides = (*central_block(plane), width)
        if min(sides) * np.prod(sides) > min(best) * np.prod(best):
            best = sides
    return best


class VolumeInspector(Inspector):
    """Looks at a volume slab by slab.

    Attributes
    ----------
    slabs : Slabs
    patterns : dict
        What was sampled, by frame and contrast.
    """

    def __init__(self, scan: Scan) -> None:
        super().__init__(scan)
        self.source = self.slabs = slabs(scan)
        self.spikes = SpikeCount(self.slabs.plane_axes)
        self.patterns: dict[Key, Pattern] = {}
        self._held = np.zeros(scan.axes["kx"], np.bool_)

    def _see(
        self, index: PlaneIndex, average: int, kspace: NDArray[np.complex64], mask: NDArray[np.bool_]
    ) -> None:
        super()._see(index, average, kspace, mask)
        self._held |= np.any(kspace != 0, axis=(0, 1))

    def _along_readout(self, holds: NDArray[np.bool_]) -> NDArray[np.bool_]:
        return np.asarray(holds.any(axis=1, keepdims=True))  # columns are judged by all slabs together

    def _count(self, index: PlaneIndex, samples: Samples) -> None:
        key = index.frame, index.contrast
        if key not in self.patterns:
            self.patterns[key] = Pattern(self.scan.plane_shape, self.scan.axes["kx"])
        self.patterns[key].see(index.slice, samples.counts)
        self.sampling.count(samples.counts)
        self.readouts += int(samples.counts.max(axis=1).sum())

    def _where(self, index: PlaneIndex, average: int | None = None) -> str:
        place = {"frame": index.frame, "contrast": index.contrast, "kz": index.slice}
        if average is not None:
            place["average"] = average
        parts = [f"{axis} {position}" for axis, position in place.items() if axis in self.scan.axes]
        return f" in {', '.join(parts)}"

    def finish(self) -> Inspection:
        """See `Inspector.finish`."""
        self._judge_columns()
        if any(pattern.full is not None for pattern in self.patterns.values()):
            self.union = None  # joint problems are calibrated from each volume's own centre
        varying = [pattern.full for pattern in self.patterns.values() if pattern.full is not None]
        blocks = []
        for (frame, contrast), pattern in self.patterns.items():
            if not pattern.lines.any():
                where = f" in frame {frame}, contrast {contrast}" if len(self.patterns) > 1 else ""
                raise InvalidScan(f"{self._nothing()}{where}; a volume needs at least one sampled position")
            if self.union is not None:
                self.union.see(PlaneIndex(frame, 0, contrast), pattern.lines > 0)
            block = pattern.calibration()
            blocks.append((block[0], block[1]))
            if pattern.full is None:
                self.sampling.judge(pattern.lines > 0, block[:2])
            else:
                self.sampling.judge(pattern.full, block)
        self.sampling.calibration = min(blocks, key=lambda sides: sides[0] * sides[1])
        self.sampling.varies_along_columns = bool(varying)
        self.sampling.is_partial_echo = all(is_partial_echo(full) for full in varying)
        return super().finish()

    def _judge_columns(self) -> None:
        """Columns that hold nothing in any slab: not sampled where the mask is inferred, else a finding."""
        if self._held.all() or not self._held.any():
            return
        if self.scan.mask_array is not None:
            empty = sum(pattern.sampled(~self._held) for pattern in self.patterns.values())
            if empty and self.empty_first is None:
                self.empty_first = f"kx {int(np.argmin(self._held))}"
            self.empty_positions += empty
            return
        self.slabs.columns = self._held
        for pattern in self.patterns.values():
            pattern.full = (pattern.lines > 0)[..., np.newaxis] & self._held
        share = int(self._held.sum()), len(self._held)
        self.sampling.sampled = self.sampling.sampled * share[0] // share[1]
        self.sampling.samples = self.sampling.samples * share[0] // share[1]

    def _coverage(self) -> dict[str, Coverage]:
        columns = np.zeros(self.scan.axes["kx"], np.bool_)
        for pattern in self.patterns.values():
            columns |= True if pattern.full is None else pattern.full.any(axis=(0, 1))
        return {**super()._coverage(), "kx": coverage(columns)}

    def _findings(self) -> list[Finding]:
        return [*super()._findings(), *readout_finding(self.sampling, ("ky", "kx"))]
