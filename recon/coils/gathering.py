"""Gathering the calibration k-space of every slice while a scan is read once, plane by plane.

Where the frames of a slice sample different lines and none of them has a fully sampled centre of its own, their mean

    y(k) = sum_f n_f(k) y_f(k) / sum_f n_f(k),   over the frames f that sampled k

often has one (Kellman, Epstein & McVeigh 2001). What moves is blurred in it, but coil maps are the same in every frame.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, Final, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from recon.averages import Samples, block_scale
from recon.coils.calibration import (
    LARGEST_BLOCK,
    central_block,
    check_block,
    crop_block,
    is_large_enough,
    prefers_time_average,
)
from recon.errors import InvalidScan
from recon.operators.fourier import crop_readout
from recon.scan import PlaneIndex, Scan

#: where a slice's calibration came from.
Source = Literal["scan", "time-average", "reference"]
#: frames and contrasts of one slice that share in its calibration.
BLOCKS_PER_SLICE: Final = 8


@dataclass(frozen=True)
class Calibration:
    """What the maps of one slice are computed from.

    Attributes
    ----------
    blocks : list of complex64 (coil, rows, columns)
        Central k-space of some planes, scaled so that their noise is that of the whitener.
    source : {"scan", "time-average", "reference"}
    is_full : bool
        Whether every position of every block was sampled.
    """

    blocks: list[NDArray[Any]]
    source: Source
    is_full: bool

    @property
    def sides(self) -> tuple[int, int]:
        """Rows and columns that every block has."""
        return min(block.shape[1] for block in self.blocks), min(block.shape[2] for block in self.blocks)

    def scaled(self, factor: float) -> Calibration:
        """The same times a number."""
        return replace(self, blocks=[np.float32(factor) * block for block in self.blocks])


class Gatherer:
    """Takes in planes slice by slice, one plane in memory at a time, and keeps small blocks of them.

    Parameters
    ----------
    scan : Scan
    shape : (rows, columns)
        Of a plane as it is solved.
    needs_full : bool
        Whether blocks without a gap are needed.
    """

    def __init__(self, scan: Scan, shape: tuple[int, int], *, needs_full: bool) -> None:
        self.scan, self.shape, self.needs_full = scan, shape, needs_full
        self.found: dict[int, Calibration] = {}
        per_slice = len(scan.planes()) // scan.axes.get("slice", 1)
        self._chosen = {round(step * per_slice / BLOCKS_PER_SLICE) for step in range(BLOCKS_PER_SLICE)}
        self._has_frames = scan.axes.get("frame", 1) > 1 and scan.reference_array is None
        self._is_cropped = shape[1] != scan.plane_shape[1]
        self._begin(0)

    def _begin(self, position: int) -> None:
        self._current, self._seen = position, 0
        self._blocks: list[_Block] = []
        self._averages: dict[int, _TimeAverage] = {}

    def see(self, index: PlaneIndex, samples: Samples) -> None:
        """Take in one plane; all planes of a slice follow each other.

        Raises
        ------
        CalibrationMissing
            When the planes of the slice before, now complete, have no fully sampled centre and one is needed.
        """
        if index.slice != self._current:
            self._end()
            self._begin(index.slice)
        if self._seen in self._chosen and (self.scan.reference_array is None or not self._blocks):
            self._blocks.append(self._block(samples))
        if self._has_frames:
            average = self._averages.setdefault(index.contrast, _TimeAverage())
            average.add(self._centre(samples))
        self._seen += 1

    def finish(self) -> dict[int, Calibration]:
        """Calibration of every slice.

        Raises
        ------
        CalibrationMissing
            As `see`.
        """
        self._end()
        return self.found

    def _end(self) -> None:
        """Choose what the slice now complete is calibrated from."""
        source: Source = "scan"
        blocks = self._blocks
        if self.scan.reference_array is not None:
            source = "reference"
            block = _reference_block(self.scan, self.shape, self._current, blocks[0].kspace)
            blocks = [_Block(block, (block.shape[1], block.shape[2]))]
        elif self._averages:
            averaged = [self._block(average.mean()) for average in self._averages.values()]
            if prefers_time_average(_smallest(blocks), _smallest(averaged)):
                source, blocks = "time-average", averaged[:BLOCKS_PER_SLICE]
        if self.needs_full:
            check_block(*_smallest(blocks), self.shape, "the mask")
        self.found[self._current] = Calibration(
            [block.kspace for block in blocks], source, all(block.is_full for block in blocks)
        )

    def _centre(self, samples: Samples) -> Samples:
        """All that any block of a plane is taken from."""
        kspace, counts = samples
        rows = min((2 if self._is_cropped else 1) * LARGEST_BLOCK, counts.shape[0])
        columns = counts.shape[1] if self._is_cropped else min(LARGEST_BLOCK, counts.shape[1])
        return Samples(crop_block(kspace, rows, columns), crop_block(counts, rows, columns))

    def _block(self, samples: Samples) -> _Block:
        """Central block with the noise of one sample, readout oversampling removed where that is possible.

        Without a fully sampled centre it has gaps: enough where only the coils' mutual strength is wanted.
        """
        kspace, counts = self._centre(samples)
        if self._is_cropped:
            kspace = crop_readout(kspace, self.shape[1])
            counts = np.broadcast_to(counts[:, :1], kspace.shape[1:])
        full = central_block(counts > 0)
        is_large = is_large_enough(*full, self.shape)
        wanted = full if is_large else kspace.shape[1:]
        block = crop_block(kspace, *(min(LARGEST_BLOCK, n) for n in wanted))
        scale = block_scale(crop_block(counts, *block.shape[1:]))
        return _Block(block if scale == 1 else block * np.float32(scale), full)


class _Block(NamedTuple):
    """Central k-space of a plane, and the sides of its fully sampled centre."""

    kspace: NDArray[Any]
    full: tuple[int, int]

    @property
    def is_full(self) -> bool:
        return all(full >= n for full, n in zip(self.full, self.kspace.shape[1:], strict=True))


def _smallest(blocks: list[_Block]) -> tuple[int, int]:
    """The smallest fully sampled centre."""
    return min((block.full for block in blocks), key=lambda sides: sides[0] * sides[1])


class _TimeAverage:
    """Sum of the frames' samples and their number, position by position."""

    def __init__(self) -> None:
        self._sum: NDArray[np.complex64] | None = None
        self._counts: NDArray[np.int64] | None = None

    def add(self, samples: Samples) -> None:
        """Take in one frame."""
        if self._sum is None or self._counts is None:
            self._sum, self._counts = samples.kspace * samples.counts, samples.counts.copy()
        else:
            self._sum += samples.kspace * samples.counts
            self._counts += samples.counts

    def mean(self) -> Samples:
        """Each position's mean over the frames that sampled it."""
        assert self._sum is not None
        assert self._counts is not None
        return Samples(np.asarray(self._sum / np.maximum(self._counts, 1), np.complex64), self._counts)


def _reference_block(scan: Scan, shape: tuple[int, int], position: int, centre: NDArray[Any]) -> NDArray[Any]:
    """Raw central block of `/reference`, brought to the scale of the scan.

    A calibration measured separately may have another receiver gain; maps do not depend on it, but what counts as
    signal does. The scale is that of the positions which the scan has sampled too.

    Parameters
    ----------
    shape : (rows, columns)
        Of a plane as it is solved.
    centre : complex (coil, rows, columns)
        Central block of the scan, zero where not sampled.
    """
    reference = scan.reference(position)
    assert reference is not None
    if not reference.any():
        raise InvalidScan(
            f"/reference of slice {position} is zero everywhere; write it as measured or leave it out"
        )
    kept = max(1, round(reference.shape[2] * shape[1] / scan.plane_shape[1]))
    cropped = crop_readout(reference, kept)
    check_block(cropped.shape[1], kept, shape, "/reference")
    block = crop_block(cropped, min(cropped.shape[1], LARGEST_BLOCK), min(kept, LARGEST_BLOCK))
    sides = min(block.shape[1], centre.shape[1]), min(block.shape[2], centre.shape[2])
    ours, theirs = crop_block(centre, *sides), crop_block(block, *sides)
    theirs = theirs * np.any(ours != 0, axis=0)
    scale = np.linalg.norm(ours) / np.linalg.norm(theirs) if theirs.any() else 1.0
    return np.asarray(block * np.float32(scale), np.complex64)
