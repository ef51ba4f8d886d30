"""What must be known of a whole scan before its first plane is solved: facts, whitener, virtual coils, noise units."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from recon.averages import Samples, block_scale, relative_weights
from recon.coils.calibration import LARGEST_BLOCK, calibration_block, check_block, crop_block
from recon.coils.compression import Compression
from recon.coils.maps import MapMaker, MapMethod, squared_gain
from recon.coils.noise import Whitening, estimate_whitening
from recon.errors import InvalidScan
from recon.feasibility import check_job, needs_maps
from recon.inspection import Inspection, Inspector, check_finite
from recon.operators.fourier import crop_readout
from recon.scan import PlaneIndex, Scan, cropped_readout
from recon.settings import Settings
from recon.strengths import resolve_strengths

#: frames and contrasts of one slice that share in its calibration.
BLOCKS_PER_SLICE: Final = 8

Report = Callable[[str, float], None]


class Plane(NamedTuple):
    """One plane as it is solved.

    Attributes
    ----------
    kspace : complex64 (coil, rows, columns)
        Whitened, readout oversampling removed, zero where not sampled; of averages the mean.
    mask : bool (rows, columns)
    weights : float32 (rows, columns) or None
        sqrt(n / mean n) where positions were measured unequally often, zero where not sampled; None: one everywhere.
    """

    kspace: NDArray[Any]
    mask: NDArray[np.bool_]
    weights: NDArray[np.float32] | None = None

    @property
    def weighted(self) -> NDArray[Any]:
        """Samples whose noise has unit variance."""
        return self.kspace if self.weights is None else self.kspace * self.weights


@dataclass(frozen=True)
class Preparation:
    """Everything that the planes share.

    Attributes
    ----------
    settings : Settings
        As resolved: no strength is `auto` any more, nor the map method where maps are made.
    shape : (rows, columns)
        Of a plane as it is solved; `image_columns` of them are kept.
    kappa : float
        u = kappa m: noise units over image units.
    blocks : dict
        Raw calibration blocks by slice, scaled so that their noise is that of the whitener.
    mean_count : float
        Samples behind a sampled position, in the mean.
    """

    scan: Scan
    settings: Settings
    inspection: Inspection
    whitening: Whitening
    compression: Compression
    map_method: MapMethod | None
    shape: tuple[int, int]
    image_columns: int
    kappa: float
    blocks: dict[int, list[NDArray[Any]]]
    mean_count: float = 1.0

    def map_maker(self) -> MapMaker:
        """The maker of each slice's maps."""
        assert self.map_method is not None
        return MapMaker(self.scan, self.map_method, self.whitening, self.compression, self.shape)

    def whitened_blocks(self, position: int) -> list[NDArray[Any]]:
        """Whitened calibration blocks of one slice."""
        return [self.whitening.apply(block) for block in self.blocks[position]]

    def load(self, index: PlaneIndex) -> Plane:
        """One plane of the scan, ready to be solved."""
        samples = self.scan.samples(index)
        kspace = self.whitening.apply(crop_readout(samples.kspace, self.shape[1]))
        counts = samples.counts
        if self.shape[1] != counts.shape[1]:
            counts = np.broadcast_to(counts[:, :1], self.shape)
        return Plane(kspace, counts > 0, relative_weights(counts, self.mean_count))

    def groups(self) -> list[list[PlaneIndex]]:
        """Planes that are solved together: the frames of a slice and contrast if something ties them, else one each."""
        settings, planes = self.settings, self.scan.planes()
        is_tied = settings.method == "compressed-sensing" and (
            float(settings.temporal_strength) > 0 or float(settings.low_rank_strength) > 0
        )
        if not is_tied or self.scan.axes.get("frame", 1) == 1 or self.map_method is None:
            return [[index] for index in planes]
        series: dict[tuple[int, int], list[PlaneIndex]] = {}
        for index in planes:
            series.setdefault((index.slice, index.contrast), []).append(index)
        return list(series.values())

    def figures(self) -> dict[str, Any]:
        """The stages' own figures for the report."""
        return {
            "whitening": {"source": self.whitening.source, "samples": self.whitening.samples},
            "averages": {"mean_count": self.mean_count},
            "readout_crop": {"from": self.scan.plane_shape[1], "to": self.image_columns},
            "coil_compression": {
                "coils": self.scan.coils,
                "virtual_coils": self.compression.coils,
                "kept_energy": self.compression.kept_energy,
            },
            "coil_maps": {"method": self.map_method or "none"},
            "noise_units": {"kappa": self.kappa, "known": self.whitening.has_noise_units},
        }


def prepare(scan: Scan, settings: Settings, report: Report) -> Preparation:
    """Read a scan once and work out what its planes share.

    Parameters
    ----------
    scan : Scan
    settings : Settings
    report : callable
        Called as report(stage, fraction of that stage).

    Raises
    ------
    InvalidScan
        For content that cannot be reconstructed, a missing calibration region included.
    InvalidSettings
        For settings that do not fit the scan.
    """
    method = _map_method(scan, settings)
    shape = _solved_shape(scan)
    inspection, blocks, shape = _read(scan, shape, method, report)
    mean_count = float(inspection.sampling["samples_per_position"]["mean"])
    if mean_count != 1:
        unit = np.float32(1 / np.sqrt(mean_count))
        blocks = {position: [unit * block for block in of_slice] for position, of_slice in blocks.items()}
    check_job(inspection.as_dict(), settings)
    check_finite(scan)
    report("whiten", 0.0)
    whitening = estimate_whitening(scan, mean_count)
    resolved = resolve_strengths(settings, has_noise_units=whitening.has_noise_units)
    report("crop", 0.0)
    report("compress", 0.0)
    gram = np.zeros((scan.coils, scan.coils), np.complex128)
    for block in (block for of_slice in blocks.values() for block in of_slice):
        samples = whitening.apply(block).reshape(scan.coils, -1).astype(np.complex128)
        gram += samples @ samples.conj().T / samples.shape[1]
    gram /= sum(len(of_slice) for of_slice in blocks.values())
    # one coil has nothing to compress, and images coil by coil use all of them
    rule = None if method in (None, "single-coil") or scan.coils == 1 else resolved.coil_compression
    compression = Compression(gram, rule, has_noise_units=whitening.has_noise_units)
    if method is not None:
        resolved = resolved.model_copy(
            update={"coil_maps": settings.coil_maps if method == "single-coil" else method}
        )
    return Preparation(
        scan=scan,
        settings=resolved,
        inspection=inspection,
        whitening=whitening,
        compression=compression,
        map_method=method,
        shape=shape,
        image_columns=cropped_readout(scan),
        kappa=float(
            np.sqrt(
                squared_gain(
                    [block for of_slice in blocks.values() for block in of_slice], whitening, compression
                )
            )
        ),
        blocks=blocks,
        mean_count=mean_count,
    )


def _map_method(scan: Scan, settings: Settings) -> MapMethod | None:
    if scan.coils == 1:
        is_supplied = scan.sensitivity_array is not None and settings.coil_maps in ("auto", "supplied")
        return "supplied" if is_supplied else "single-coil"
    if not needs_maps(settings, scan.coils):
        return None
    if settings.coil_maps == "auto":
        return "supplied" if scan.sensitivity_array is not None else "eigenvector"
    return settings.coil_maps


def _solved_shape(scan: Scan) -> tuple[int, int]:
    """Rows and columns of a plane as it is solved.

    A mask that varies along kx leaves readouts incomplete: they cannot be transformed, and so not cropped, before the
    solve.
    """
    rows, encoded = scan.plane_shape
    columns = cropped_readout(scan)
    if columns == encoded or scan.mask_array is None or "kx" not in scan.mask_array.axes:
        return rows, columns
    outer = [axis for axis in scan.outer_axes if axis in scan.mask_array.axes]
    # a mask without outer axes is the same for every plane and read once
    indices = scan.planes() if outer else scan.planes()[:1]
    masks = (scan.mask_array.take(**index._asdict()) for index in indices)
    is_complete = all((mask == mask[..., :1]).all() for mask in masks)
    return rows, columns if is_complete else encoded


def _read(
    scan: Scan, shape: tuple[int, int], method: MapMethod | None, report: Report
) -> tuple[Inspection, dict[int, list[NDArray[Any]]], tuple[int, int]]:
    """One pass over all data: facts, each slice's calibration blocks, and the shape of a plane as it is solved."""
    inspector = Inspector(scan)
    blocks: dict[int, list[NDArray[Any]]] = {}
    planes = scan.planes()
    shared = len(planes) // scan.axes.get("slice", 1)
    chosen = {round(step * shared / BLOCKS_PER_SLICE) for step in range(BLOCKS_PER_SLICE)} if shared else {0}
    for done, index in enumerate(planes):
        report("read", done / len(planes))
        samples = inspector.read(index)
        report("inspect", done / len(planes))
        if shape[1] != scan.plane_shape[1] and (samples.counts != samples.counts[:, :1]).any():
            # a partial echo that only the data show: its readouts cannot be transformed, and so not cropped, either
            return _read(scan, scan.plane_shape, method, report)
        if done % shared in chosen:
            of_slice = blocks.setdefault(index.slice, [])
            needs_full = method in ("eigenvector", "adaptive")
            if scan.reference_array is None:
                of_slice.append(_block(shape, samples, must_be_full=needs_full))
            elif not of_slice:
                centre = _block(shape, samples, must_be_full=False)
                of_slice.append(_reference_block(scan, shape, index.slice, centre))
    return inspector.finish(), blocks, shape


def _block(shape: tuple[int, int], samples: Samples, *, must_be_full: bool) -> NDArray[Any]:
    """Central block of one plane with the noise of one sample, readout oversampling removed where that is possible."""
    columns = shape[1]
    kspace, counts = samples
    if columns != counts.shape[1]:
        rows = min(2 * LARGEST_BLOCK, counts.shape[0])
        centre = crop_block(counts, rows, counts.shape[1])
        kspace = crop_readout(crop_block(kspace, rows, counts.shape[1]), columns)
        counts = np.broadcast_to(centre[:, :1], (rows, columns))
    if must_be_full:
        block = calibration_block(kspace, counts > 0)
    else:
        # only the coils' mutual strength is wanted, which gaps do not change
        block = crop_block(kspace, *(min(LARGEST_BLOCK, n) for n in counts.shape))
    scale = block_scale(crop_block(counts, *block.shape[1:]))
    return block if scale == 1 else block * np.float32(scale)


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
