"""Reading a volume: what is in it, and its planes packed in memory."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from recon.coils.calibration import LARGEST_BLOCK
from recon.feasibility import check_job
from recon.grid import ImageGrid, image_grid
from recon.inspection import Inspection
from recon.scan import Scan
from recon.settings import Settings
from recon.volume import PlaneScan, Slabs, plane_scan, read_centre, read_lines
from recon.volume_inspection import Pattern, VolumeInspector


@dataclass(frozen=True)
class Volume:
    """A volume that has been read.

    Attributes
    ----------
    scan : Scan
        As it was given: axes, geometry, findings.
    slabs : Slabs
        Its k-space, one `kz` at a time.
    planes : PlaneScan
        Its readout positions, in memory.
    inspection : Inspection
    grid : ImageGrid
        Of the volume's image.
    is_complete : bool
        Whether the mask is constant along `kx`. Otherwise the planes hold the fully sampled centre alone, for the coil
        maps, and the volume is solved in k-space.
    """

    scan: Scan
    slabs: Slabs
    planes: PlaneScan
    inspection: Inspection
    grid: ImageGrid
    is_complete: bool


def read_volume(scan: Scan, settings: Settings, report: Callable[[str, float], None]) -> Volume:
    """Inspect a volume, then read its sampled lines.

    Raises
    ------
    InvalidScan
        For content that cannot be reconstructed.
    InvalidSettings
        For settings that do not fit the scan.
    """
    inspector = VolumeInspector(scan)
    indices = inspector.slabs.planes()
    for done, index in enumerate(indices):
        report("read", done / len(indices) / 2)
        inspector.read(index)
        report("inspect", done / len(indices) / 2)
    inspection = inspector.finish()
    check_job(inspection.as_dict(), settings)
    patterns = inspector.patterns
    is_complete = all(pattern.full is None for pattern in patterns.values())
    if is_complete:
        counts = {key: pattern.lines for key, pattern in patterns.items()}
        lines = read_lines(inspector.slabs, counts, lambda fraction: report("read", (1 + fraction) / 2))
    else:
        lines = {
            key: read_centre(inspector.slabs, key, _centre(pattern)) for key, pattern in patterns.items()
        }
    return Volume(scan, inspector.slabs, plane_scan(scan, lines), inspection, image_grid(scan), is_complete)


def _centre(pattern: Pattern) -> tuple[int, int, int]:
    """Sides of the block that stands for a volume in coil calibration: fully sampled where there is such a block."""
    sides = pattern.calibration()
    if min(sides) == 0:
        sides = (*pattern.lines.shape, pattern.columns)
    z, y, x = (min(n, LARGEST_BLOCK) for n in sides)
    return z, y, x
