"""The main path: a scan in, an image and a report out, plane by plane.

    read -> inspect -> whiten -> combine averages -> crop readout oversampling -> compress coils -> coil maps -> solve
    -> combine -> consistency -> write

Memory hardly grows with the number of planes: one (or one series of frames that are tied together) for each thread is
read, solved and judged; results are written in order.
"""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from recon.coils.maps import CoilMaps, MapFigures
from recon.consistency import ResidualFigures
from recon.errors import InvalidScan
from recon.formats import ImageWriter, open_scan
from recon.grid import image_grid
from recon.joint import run_joint
from recon.memory import check_memory
from recon.parallel import in_order
from recon.plane import PlaneResult, reconstruct_together
from recon.preparation import Plane, Preparation, Sink, prepare
from recon.report import SolverFigures, build_report
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings
from recon.volume_sink import PositionSink

#: called as progress(stage, fraction of the whole job); raise from it to cancel between two iterations.
Progress = Callable[[str, float], None]

STAGES: Final = (
    "read", "inspect", "whiten", "crop", "compress", "coil-maps", "solve", "combine", "consistency", "write",
)  # fmt: skip
#: share of the whole job that is over when the first plane's maps begin, and when the last plane is written.
_PREPARED: Final = 0.05
_PLANES_DONE: Final = 0.98


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
    tell = _Teller(progress)
    check_memory(scan, settings or Settings(), memory_limit_bytes, threads=threads)
    with _one_thread_for_each_plane():
        preparation = prepare(scan, settings or Settings(), tell.preparing)
        report = _run(preparation, _sink(preparation, memory), tell, provenance or {}, threads)
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
    tell = _Teller(progress)
    with _one_thread_for_each_plane(), open_scan(scan_path) as scan:
        check_memory(scan, settings or Settings(), memory_limit_bytes, threads=threads)
        preparation = prepare(scan, settings or Settings(), tell.preparing)
        with ImageWriter(image_path, scan, preparation.image_grid) as writer:
            report = _run(preparation, _sink(preparation, writer), tell, provenance or {}, threads)
            tell("write", _PLANES_DONE)
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
    preparation: Preparation, sink: Sink, tell: _Teller, provenance: Mapping[str, Any], threads: int
) -> dict[str, Any]:
    if preparation.is_joint:
        return run_joint(preparation, sink, tell, provenance)
    residuals = ResidualFigures(
        preparation.shape,
        preparation.whitening,
        preparation.scan.axes,
        is_volume=preparation.volume is not None,
    )
    solver = SolverFigures()
    groups = preparation.groups()
    shelf = _MapShelf(preparation, tell, threads + 1)
    tell.begin(len(groups))

    def work(group: list[PlaneIndex]) -> _Work:
        maps = shelf.maps_of(group[0].slice)
        planes = [preparation.load(index) for index in group]
        tell("solve")
        results = reconstruct_together(
            preparation, maps, planes, tell.iteration(group[0], preparation.settings)
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


def _one_thread_for_each_plane() -> threadpool_limits:
    """Keep linear algebra to its caller's thread: threads are for planes, and its sums would depend on their number."""
    return threadpool_limits(limits=1, user_api="blas")


@dataclass(frozen=True)
class _Work:
    """Planes that were solved together, with what they were solved from."""

    group: list[PlaneIndex]
    planes: list[Plane]
    results: list[PlaneResult]


class _MapShelf:
    """Maps of the slices now worked on, made once by whichever thread needs them first."""

    def __init__(self, preparation: Preparation, tell: _Teller, size: int) -> None:
        self.preparation, self.tell, self.size = preparation, tell, size
        self.figures: dict[int, MapFigures] = {}
        self._kept: OrderedDict[int, CoilMaps] = OrderedDict()
        self._locks: dict[int, threading.Lock] = {}
        self._lock = threading.Lock()

    def maps_of(self, position: int) -> CoilMaps | None:
        """Maps of one slice; None for the coil-by-coil method, which needs none."""
        if self.preparation.map_method is None:
            return None
        with self._lock:
            lock = self._locks.setdefault(position, threading.Lock())
        with lock:
            maps = self._kept.get(position)
            if maps is None:
                self.tell("coil-maps")
                maps = self.preparation.make_maps(position)
        with self._lock:
            self.figures[position] = maps.figures
            self._kept[position] = maps
            while len(self._kept) > self.size:
                self._kept.popitem(last=False)
        return maps


class _Teller:
    """Turns what happens in each stage, in whichever thread, into one fraction that only grows."""

    def __init__(self, progress: Progress | None) -> None:
        self.progress = progress
        self.fraction = 0.0
        self._lock = threading.RLock()
        self._done, self._groups = 0, 1
        self._within: dict[PlaneIndex, float] = {}
        self._error: BaseException | None = None

    def __call__(self, stage: str, fraction: float | None = None) -> None:
        with self._lock:
            if self._error is not None:  # raised in another thread: the whole job is cancelled
                raise self._error
            if fraction is not None:
                self.fraction = max(self.fraction, min(fraction, 1.0))
            if self.progress is not None:
                try:
                    self.progress(stage, self.fraction)
                except BaseException as error:
                    self._error = error
                    raise

    def preparing(self, stage: str, fraction: float) -> None:
        """Progress within the pass over all data, the first part of the job."""
        self(stage, _PREPARED * fraction)

    def begin(self, groups: int) -> None:
        """The groups of planes begin."""
        self._groups = groups
        self("coil-maps", _PREPARED)

    def finished(self, group: PlaneIndex) -> None:
        """One more group, named by its first plane, is written."""
        with self._lock:
            self._done += 1
            self._within.pop(group, None)
            self._advance("write")

    def iteration(self, group: PlaneIndex, settings: Settings) -> Callable[[int, float], None]:
        """Callback of the solver; the residual falls geometrically, so its logarithm tells how far the solve is."""
        goal = np.log(settings.tolerance)

        def tell(iteration: int, optimality: float) -> None:
            by_residual = np.log(min(max(optimality, settings.tolerance), 1.0)) / goal
            by_count = iteration / settings.max_iterations
            with self._lock:
                self._within[group] = 0.95 * float(max(by_residual, by_count))
                self._advance("solve")

        return tell

    def _advance(self, stage: str) -> None:
        over = self._done + sum(self._within.values())
        self(stage, _PREPARED + (_PLANES_DONE - _PREPARED) * over / self._groups)
