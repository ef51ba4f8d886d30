"""The main path: a scan in, an image and a report out, plane by plane.

    read -> inspect -> whiten -> combine averages -> crop readout oversampling -> compress coils -> coil maps -> solve
    -> combine -> consistency -> write

Memory hardly grows with the number of planes: one (or one series of frames that are tied together) for each thread is
read, solved and judged; results are written in order.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from recon.consistency import ResidualFigures
from recon.errors import InvalidScan
from recon.formats import ImageWriter, open_scan
from recon.grid import image_grid
from recon.joint import run_joint
from recon.map_shelf import MapShelf
from recon.memory import check_memory
from recon.parallel import in_order
from recon.plane import PlaneResult, reconstruct_together
from recon.preparation import Plane, Preparation, Sink
from recon.prepare import prepare
from recon.progress import PLANES_DONE, Progress, Teller
from recon.report import SolverFigures, build_report
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings
from recon.strengths import settle_temporal
from recon.tuning import tune
from recon.volume_sink import PositionSink


@dataclass(frozen=True)
class Reconstruction:
    """Result in memory.

    Attributes
    ----------
    image, residual_image : complex64 ndarray
        In the order of `axes`.
    axes : tuple of str
    report : dict
        See `recon.report.build_report`.
    """

    image: NDArray[np.complex64]
    residual_image: NDArray[np.complex64]
    axes: tuple[str, ...]
    report: dict[str, Any]


def reconstruct(
    scan: Scan,
    settings: Settings | None = None,
    *,
    progress: Progress | None = None,
    provenance: Mapping[str, Any] | None = None,
    threads: int = 1,
    memory_limit_bytes: int | None = None,
) -> Reconstruction:
    """Reconstruct a scan in memory.

    For every plane, with S the coil maps, P the mask, F the centred unitary transform, u = kappa m in noise units:

        minimise 1/2 sum_c ||P F S_c u - y_c||^2 + 1/2 ||u outside the maps||^2 + lambda_w ||W u||_1 + lambda_t TV(u)

    Parameters
    ----------
    scan : Scan
        From `recon.formats.open_scan`, or made of arrays.
    settings : Settings, optional
    progress : callable, optional
    provenance : mapping, optional
        Put into the report as it is.
    threads : int
        Planes (or series) worked on at once; the result does not depend on it.
    memory_limit_bytes : int, optional
        What will not fit is refused before its k-space is read; without a limit nothing is.

    Returns
    -------
    Reconstruction

    Raises
    ------
    InvalidScan, InvalidSettings
        Naming what was received, what is accepted and what to do.
    """
    memory = _Memory(scan)
    tell = Teller(progress)
    settings = _settled(settings, scan)
    check_memory(scan, settings, memory_limit_bytes, threads=threads)
    with _one_thread_for_each_plane():
        preparation = prepare(scan, settings, tell.preparing)
        report = _run(preparation, settings, _sink(preparation, memory), tell, provenance or {}, threads)
    tell("write", 1.0)
    arrays = memory.arrays
    return Reconstruction(arrays["image"], arrays["residual_image"], scan.image_axes, report)


def reconstruct_file(
    scan_path: Path | str,
    image_path: Path | str,
    settings: Settings | None = None,
    *,
    progress: Progress | None = None,
    provenance: Mapping[str, Any] | None = None,
    threads: int = 1,
    memory_limit_bytes: int | None = None,
) -> dict[str, Any]:
    """Reconstruct a scan file into an image file, see `reconstruct`.

    Parameters
    ----------
    scan_path, image_path : path
        The image is written to exactly this path and is complete only when the function has returned: give a
        temporary name and rename.

    Returns
    -------
    dict
        The report, which is in the image file too.
    """
    if Path(image_path).exists() and Path(image_path).samefile(scan_path):
        raise InvalidScan(f"the image would overwrite the scan {Path(scan_path).name}; give it another path")
    tell = Teller(progress)
    with _one_thread_for_each_plane(), open_scan(scan_path) as scan:
        settings = _settled(settings, scan)
        check_memory(scan, settings, memory_limit_bytes, threads=threads)
        preparation = prepare(scan, settings, tell.preparing)
        with ImageWriter(image_path, scan, preparation.image_grid) as writer:
            sink = _sink(preparation, writer)
            report = _run(preparation, settings, sink, tell, provenance or {}, threads)
            tell("write", PLANES_DONE)
            writer.finish(report, provenance or {})
    tell("write", 1.0)
    return report


class _Memory:
    """Keeps finished images as arrays."""

    def __init__(self, scan: Scan) -> None:
        self._outer = scan.outer_axes
        self._shape = (*(scan.axes[axis] for axis in self._outer), *image_grid(scan).written)
        self.arrays: dict[str, NDArray[np.complex64]] = {}

    def _part(self, name: str, index: PlaneIndex) -> NDArray[np.complex64]:
        array = self.arrays.setdefault(name, np.zeros(self._shape, np.complex64))
        part: NDArray[np.complex64] = array[tuple(index._asdict()[axis] for axis in self._outer)]
        return part

    def write(self, name: str, index: PlaneIndex, plane: NDArray[np.complex64]) -> None:
        self._part(name, index)[...] = plane

    def write_positions(
        self, name: str, index: PlaneIndex, positions: slice, part: NDArray[np.complex64]
    ) -> None:
        self._part(name, index)[..., positions] = part


def _sink(preparation: Preparation, target: _Memory | ImageWriter) -> Sink:
    """Where planes go: straight to the target, or through a collector of a volume's readout positions."""
    if preparation.volume is None:
        return target
    grid = preparation.image_grid
    # a volume solved in k-space is brought to its grid as a whole
    positions = grid.kept[-1] if preparation.volume.is_complete else grid.written[-1]
    is_magnitude = preparation.settings.combination == "root-sum-of-squares"
    return PositionSink(target, positions, grid.written[-1], is_magnitude=is_magnitude)


def _run(
    preparation: Preparation,
    settings: Settings,
    sink: Sink,
    tell: Teller,
    provenance: Mapping[str, Any],
    threads: int,
) -> dict[str, Any]:
    groups = preparation.groups()
    shelf = MapShelf(preparation, tell, threads + 1)
    # planes of a volume can speak for it only where it falls into planes
    is_in_planes = preparation.volume is None or preparation.volume.is_complete
    choice = None
    if is_in_planes:
        preparation, choice = tune(preparation, settings, groups, shelf, tell, threads)
    if preparation.is_joint:
        return run_joint(preparation, choice, sink, tell, provenance)
    residuals = ResidualFigures(
        preparation.shape,
        preparation.whitening,
        preparation.scan.axes,
        is_volume=preparation.volume is not None,
    )
    solver = SolverFigures(choice)
    tell.begin(len(groups))

    def work(group: list[PlaneIndex]) -> _Work:
        maps = shelf.maps_of(group[0].slice)
        planes = [preparation.load(index) for index in group]
        tell("solve")
        results = reconstruct_together(
            preparation,
            maps,
            planes,
            tell.iteration(group[0], preparation.settings),
            start=None if choice is None else choice.starts.get(group[0]),
        )
        tell("combine")
        return _Work(group, planes, results)

    for done in in_order(work, groups, threads=threads):
        solver.see(done.group, done.results[0].solution)
        for index, plane, result in zip(done.group, done.planes, done.results, strict=True):
            tell("consistency")
            residuals.see(index, result.residuals, plane.weighted, plane.mask)
            tell("write")
            sink.write("image", index, result.image)
            sink.write("residual_image", index, result.residual_image)
        tell.finished(done.group[0])
    return build_report(preparation, residuals, solver, shelf.figures, provenance)


def _settled(settings: Settings | None, scan: Scan) -> Settings:
    frames = scan.axes.get("frame", 1)
    return settle_temporal(settings or Settings(), frames=frames, is_volume=scan.is_volume)


def _one_thread_for_each_plane() -> threadpool_limits:
    """Keep linear algebra to its caller's thread: threads are for planes, and its sums would depend on their number."""
    return threadpool_limits(limits=1, user_api="blas")


@dataclass(frozen=True)
class _Work:
    """Planes that were solved together, with what they were solved from."""

    group: list[PlaneIndex]
    planes: list[Plane]
    results: list[PlaneResult]
