"""What must be known of a whole scan before its first plane is solved: facts, whitener, virtual coils, noise units."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.coils.compression import Compression
from recon.coils.gathering import Calibration, Gatherer
from recon.coils.maps import MapMethod, largest_power, squared_gain
from recon.coils.noise import Whitening, estimate_whitening
from recon.errors import InvalidScan
from recon.exclusion import leave_out
from recon.feasibility import check_job, needs_maps
from recon.grid import image_grid
from recon.inspection import Inspection, Inspector
from recon.preparation import Preparation
from recon.scan import Scan, cropped_readout
from recon.settings import Settings
from recon.strengths import resolve_strengths
from recon.volume_reading import read_volume

Report = Callable[[str, float], None]


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
    scan, seen, excluded = leave_out(scan, settings, report)
    volume = None
    if scan.is_volume:
        volume = read_volume(scan, settings, report)
        volume = volume if seen is None else replace(volume, inspection=seen)
        scan = volume.planes
    method = _map_method(scan, settings)
    shape = _solved_shape(scan)
    known = seen if volume is None else volume.inspection
    inspection, calibration, shape = _read(scan, shape, method, report, known)
    if method == "supplied":
        _check_map_columns(scan, shape[1])
    mean_count = float(inspection.sampling["samples_per_position"]["mean"])
    if mean_count != 1:
        unit = float(1 / np.sqrt(mean_count))
        calibration = {position: each.scaled(unit) for position, each in calibration.items()}
    check_job(inspection.as_dict(), settings)
    report("whiten", 0.0)
    silent = excluded.renumbered(inspection.channels["silent_in_noise"])
    whitening = estimate_whitening(scan, mean_count, scan if volume is None else volume.slabs, silent)
    resolved = resolve_strengths(
        settings, has_noise_units=whitening.has_noise_units, frames=scan.axes.get("frame", 1)
    )
    report("crop", 0.0)
    report("compress", 0.0)
    blocks = {position: each.blocks for position, each in calibration.items()}
    grams = {position: _gram(of_slice, whitening) for position, of_slice in blocks.items()}
    # one coil has nothing to compress, and images coil by coil use all of them
    rule = None if method in (None, "single-coil") or scan.coils == 1 else resolved.coil_compression
    has_units = whitening.has_noise_units
    shares = np.array([len(blocks[position]) for position in grams], np.float64)
    mean_gram = np.average(np.stack([*grams.values()]), axis=0, weights=shares)
    compression = Compression(mean_gram, rule, has_noise_units=has_units)
    compressions = {}
    if volume is not None and settings.volume == "planes" and rule is not None:
        compressions = {
            position: Compression(gram, rule, has_noise_units=has_units, dominant=compression.dominant)
            for position, gram in grams.items()
        }
    if method is not None:
        resolved = resolved.model_copy(
            update={"coil_maps": settings.coil_maps if method == "single-coil" else method}
        )
    if volume is not None:
        volume.slabs.release()
    return Preparation(
        scan=scan,
        settings=resolved,
        inspection=inspection,
        whitening=whitening,
        compression=compression,
        map_method=method,
        shape=shape,
        grid=image_grid(scan),
        kappa=float(np.sqrt(squared_gain(_pairs(blocks, compression, compressions), whitening))),
        calibration=calibration,
        mean_count=mean_count,
        compressions=compressions,
        volume=volume,
        largest_power=0.0
        if volume is None
        else largest_power((block for of_slice in blocks.values() for block in of_slice), whitening),
        excluded=excluded,
    )


def _gram(blocks: list[NDArray[Any]], whitening: Whitening) -> NDArray[Any]:
    """Mean of y y^H over the whitened samples of a slice's blocks."""
    grams = []
    for block in blocks:
        samples = whitening.apply(block).reshape(len(block), -1).astype(np.complex128)
        grams.append(samples @ samples.conj().T / samples.shape[1])
    return np.asarray(np.mean(grams, axis=0))


def _pairs(
    blocks: Mapping[int, list[NDArray[Any]]],
    compression: Compression,
    compressions: Mapping[int, Compression],
) -> list[tuple[NDArray[Any], Compression]]:
    """Every block with the virtual coils of its slice."""
    return [
        (block, compressions.get(position, compression))
        for position, of_slice in blocks.items()
        for block in of_slice
    ]


def _map_method(scan: Scan, settings: Settings) -> MapMethod | None:
    if scan.coils == 1:
        is_supplied = scan.sensitivity_array is not None and settings.coil_maps in ("auto", "supplied")
        return "supplied" if is_supplied else "single-coil"
    if not needs_maps(settings, scan.coils):
        return None
    if settings.coil_maps == "auto":
        return "supplied" if scan.sensitivity_array is not None else "eigenvector"
    return settings.coil_maps


def _check_map_columns(scan: Scan, columns: int) -> None:
    maps = scan.sensitivity_array
    if maps is not None and maps.sizes[maps.axes[-1]] < columns:
        raise InvalidScan(
            f"/sensitivity has {maps.sizes[maps.axes[-1]]} columns, but readouts have gaps, so that the image is "
            f"solved with its oversampling: supply maps with {columns} columns"
        )


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
    scan: Scan, shape: tuple[int, int], method: MapMethod | None, report: Report, known: Inspection | None
) -> tuple[Inspection, dict[int, Calibration], tuple[int, int]]:
    """One pass over all data: facts unless known, what slices are calibrated from, the shape of a plane as solved."""
    inspector = Inspector(scan) if known is None else None
    gatherer = Gatherer(scan, shape, needs_full=method in ("eigenvector", "adaptive"))
    planes = scan.planes()
    for done, index in enumerate(planes):
        report("read", done / len(planes))
        samples = scan.samples(index) if inspector is None else inspector.read(index)
        report("inspect", done / len(planes))
        if shape[1] != scan.plane_shape[1] and (samples.counts != samples.counts[:, :1]).any():
            # a partial echo that only the data show: its readouts cannot be transformed, and so not cropped, either
            return _read(scan, scan.plane_shape, method, report, known)
        gatherer.see(index, samples)
    inspection = known if inspector is None else inspector.finish()
    assert inspection is not None
    return inspection, gatherer.finish(), shape
