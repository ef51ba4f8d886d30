"""What the planes of a scan share, and a plane as it is solved. `recon.prepare` finds it out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, NamedTuple, Protocol

import numpy as np
from numpy.typing import NDArray

from recon.averages import relative_weights
from recon.coils.compression import Compression
from recon.coils.gathering import Calibration
from recon.coils.maps import CoilMaps, MapMaker, MapMethod
from recon.coils.noise import Whitening
from recon.exclusion import Excluded
from recon.grid import ImageGrid
from recon.inspection import Inspection
from recon.operators.fourier import crop_readout
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings
from recon.volume_reading import Volume


class Sink(Protocol):
    """Where finished planes go."""

    def write(self, name: str, index: PlaneIndex, plane: NDArray[np.complex64]) -> None:
        """Store one plane of `image` or `residual_image`; of a volume one readout position (z, y), `slice` being x."""


class Plane(NamedTuple):
    """One plane as it is solved.

    Attributes
    ----------
    kspace : complex64 (coil, rows, columns)
        Whitened, readout oversampling removed, zero where not sampled; of averages the mean.
    mask : bool (rows, columns)
    weights : float32 (rows, columns) or None
        sqrt(n / mean n) where positions were measured unequally often, zero where not sampled; None: one everywhere.
    position : int
        Its slice.
    """

    kspace: NDArray[Any]
    mask: NDArray[np.bool_]
    weights: NDArray[np.float32] | None = None
    position: int = 0

    @property
    def weighted(self) -> NDArray[Any]:
        """Samples whose noise has unit variance."""
        return self.kspace if self.weights is None else self.kspace * self.weights


@dataclass(frozen=True)
class Preparation:
    """Everything that the planes share.

    Attributes
    ----------
    scan : Scan
        Read plane by plane; of a volume its readout positions, as slices.
    compression : Compression
        Virtual coils of the whole scan.
    compressions : dict
        Those of each readout position, where a volume is solved plane by plane; they share one phase reference.
    volume : Volume or None
        The volume that the planes are from.
    largest_power : float
        Of a volume's object, see `MapMaker`: positions beyond its ends hold none of it.
    settings : Settings
        As resolved: no strength is `auto` any more, nor the map method where maps are made.
    shape : (rows, columns)
        Of a plane as it is solved.
    grid : ImageGrid
        What is kept and written of it.
    kappa : float
        u = kappa m: noise units over image units.
    calibration : dict
        What the maps are computed from, by slice.
    mean_count : float
        Samples behind a sampled position, in the mean.
    excluded : Excluded
        What was left out of the scan on request.
    """

    scan: Scan
    settings: Settings
    inspection: Inspection
    whitening: Whitening
    compression: Compression
    map_method: MapMethod | None
    shape: tuple[int, int]
    grid: ImageGrid
    kappa: float
    calibration: dict[int, Calibration]
    mean_count: float = 1.0
    compressions: Mapping[int, Compression] = field(default_factory=dict)
    volume: Volume | None = None
    largest_power: float = 0.0
    excluded: Excluded = field(default_factory=Excluded)

    @property
    def image_grid(self) -> ImageGrid:
        """The grid of an image plane, or of a volume."""
        return self.grid if self.volume is None else self.volume.grid

    @property
    def is_joint(self) -> bool:
        """Whether the readout positions of a volume are one problem; without iteration nothing ties complete ones."""
        if self.volume is None or self.settings.volume != "joint":
            return False
        return self.settings.method != "zero-filled" or not self.volume.is_complete

    @property
    def solved_shape(self) -> tuple[int, ...]:
        """Of the image as it is solved, at once or plane by plane."""
        return self.shape if self.volume is None else (*self.shape, self.scan.axes["slice"])

    def compression_of(self, position: int) -> Compression:
        """The virtual coils of one slice."""
        return self.compressions.get(position, self.compression)

    def make_maps(self, position: int) -> CoilMaps:
        """Coil maps of one slice."""
        assert self.map_method is not None
        compression = self.compression_of(position)
        maker = MapMaker(
            self.scan,
            self.map_method,
            self.whitening,
            compression,
            self.shape,
            self.settings.map_sets,
            largest=self.largest_power,
        )
        return maker.make(position, self.calibration[position])

    def load(self, index: PlaneIndex) -> Plane:
        """One plane of the scan, ready to be solved."""
        samples = self.scan.samples(index)
        kspace = self.whitening.apply(crop_readout(samples.kspace, self.shape[1]))
        counts = samples.counts
        if self.shape[1] != counts.shape[1]:
            counts = np.broadcast_to(counts[:, :1], self.shape)
        return Plane(kspace, counts > 0, relative_weights(counts, self.mean_count), index.slice)

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
        compressions, grid = [*self.compressions.values()] or [self.compression], self.image_grid
        return {
            "whitening": {"source": self.whitening.source, "samples": self.whitening.samples},
            "excluded": self.excluded.as_dict(),
            "averages": {"mean_count": self.mean_count},
            "matrix": {
                "axes": list(grid.axes),
                "encoded": list(grid.encoded),
                "solved": list(self.solved_shape),
                "kept": list(grid.kept),
                "written": list(grid.written),
            },
            "coil_compression": {
                "coils": self.scan.coils,
                "virtual_coils": max(one.coils for one in compressions),
                "fewest_virtual_coils": min(one.coils for one in compressions),
                "kept_energy": float(np.mean([one.kept_energy for one in compressions])),
            },
            "coil_maps": {"method": self.map_method or "none"},
            "noise_units": {"kappa": self.kappa, "known": self.whitening.has_noise_units},
        }
