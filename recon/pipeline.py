"""The main path: a scan in, an image and a report out, plane by plane.

    read -> inspect -> whiten -> crop readout oversampling -> compress coils -> coil maps -> solve -> combine
    -> consistency -> write

Memory hardly grows with the number of planes: one (or one series of frames that are tied together) is read, solved,
judged and written before the next.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final, Protocol

import numpy as np
from numpy.typing import NDArray

from recon.coils.maps import CoilMaps
from recon.consistency import ResidualFigures
from recon.errors import InvalidScan
from recon.formats import ImageWriter, open_scan
from recon.plane import reconstruct_together
from recon.preparation import Preparation, prepare
from recon.report import SolverFigures, build_report
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings

#: called as progress(stage, fraction of the whole job); raise from it to cancel between two iterations.
Progress = Callable[[str, float], None]

STAGES: Final = (
    "read", "inspect", "whiten", "crop", "compress", "coil-maps", "solve", "combine", "consistency", "write",
)  # fmt: skip
#: share of the whole job that is over when the first plane's maps begin, and when the last plane is written.
_PREPARED: Final = 0.05
_PLANES_DONE: Final = 0.98


class Sink(Protocol):
    """Where finished planes go."""

    def write(self, name: str, index: PlaneIndex, plane: NDArray[np.complex64]) -> None:
        """Store one plane of `image` or `residual_image`."""


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

    Returns
    -------
    Reconstruction

    Raises
    ------
    InvalidScan, InvalidSettings
        Naming what was received, what is accepted and what to do.
    """
    arrays: dict[str, NDArray[np.complex64]] = {}

    class Memory:
        def write(self, name: str, index: PlaneIndex, plane: NDArray[np.complex64]) -> None:
            outer = [scan.axes[axis] for axis in scan.outer_axes]
            array = arrays.setdefault(name, np.zeros((*outer, *plane.shape), np.complex64))
            array[tuple(index._asdict()[axis] for axis in scan.outer_axes)] = plane

    tell = _Teller(progress)
    preparation = prepare(scan, settings or Settings(), tell.preparing)
    report = _run(preparation, Memory(), tell, provenance or {})
    tell("write", 1.0)
    return Reconstruction(arrays["image"], arrays["residual_image"], scan.image_axes, report)


def reconstruct_file(
    scan_path: Path | str,
    image_path: Path | str,
    settings: Settings | None = None,
    *,
    progress: Progress | None = None,
    provenance: Mapping[str, Any] | None = None,
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
    with open_scan(scan_path) as scan:
        preparation = prepare(scan, settings or Settings(), tell.preparing)
        with ImageWriter(image_path, scan, (preparation.shape[0], preparation.image_columns)) as writer:
            report = _run(preparation, writer, tell, provenance or {})
            tell("write", _PLANES_DONE)
            writer.finish(report, provenance or {})
    tell("write", 1.0)
    return report


def _run(
    preparation: Preparation, sink: Sink, tell: _Teller, provenance: Mapping[str, Any]
) -> dict[str, Any]:
    scan = preparation.scan
    residuals = ResidualFigures(preparation.shape, preparation.whitening, scan.axes)
    solver = SolverFigures()
    groups = preparation.groups()
    shares: dict[int, float] = {}
    maps: CoilMaps | None = None
    current: int | None = None
    for done, group in enumerate(groups):
        tell.group(done, len(groups))
        position = group[0].slice
        if position != current and preparation.map_method is not None:
            tell("coil-maps")
            maps = preparation.map_maker().make(position, preparation.whitened_blocks(position))
            shares[position] = maps.object_share
        current = position
        planes = [preparation.load(index) for index in group]
        tell("solve")
        results = reconstruct_together(preparation, maps, planes, tell.iteration(preparation.settings))
        solver.see(group, results[0].solution)
        tell("combine")
        for index, (kspace, mask), result in zip(group, planes, results, strict=True):
            tell("consistency")
            residuals.see(index, result.residuals, kspace, mask)
            tell("write")
            sink.write("image", index, result.image)
            sink.write("residual_image", index, result.residual_image)
    return build_report(preparation, residuals, solver, shares, provenance)


class _Teller:
    """Turns what happens in each stage into one fraction that only grows."""

    def __init__(self, progress: Progress | None) -> None:
        self.progress = progress
        self.fraction = 0.0
        self.start, self.width = _PREPARED, 0.0

    def __call__(self, stage: str, fraction: float | None = None) -> None:
        if fraction is not None:
            self.fraction = max(self.fraction, min(fraction, 1.0))
        if self.progress is not None:
            self.progress(stage, self.fraction)

    def preparing(self, stage: str, fraction: float) -> None:
        """Progress within the pass over all data, the first part of the job."""
        self(stage, _PREPARED * fraction)

    def group(self, done: int, groups: int) -> None:
        """A new plane, or series of planes, begins."""
        self.width = (_PLANES_DONE - _PREPARED) / groups
        self.start = _PREPARED + done * self.width
        self.fraction = max(self.fraction, self.start)

    def iteration(self, settings: Settings) -> Callable[[int, float], None]:
        """Callback of the solver; the residual falls geometrically, so its logarithm tells how far the solve is."""
        goal = np.log(settings.tolerance)

        def tell(iteration: int, optimality: float) -> None:
            by_residual = np.log(min(max(optimality, settings.tolerance), 1.0)) / goal
            by_count = iteration / settings.max_iterations
            self("solve", self.start + self.width * 0.95 * float(max(by_residual, by_count)))

        return tell
