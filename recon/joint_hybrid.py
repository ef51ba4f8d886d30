"""Volumes with complete readouts: solved at once, but loaded and judged position by position.

The transform along the readout has left the problem (readout in image space), so that the measurement ties no two
positions together: the penalties alone do.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.coils.maps import CoilMaps
from recon.consistency import ResidualFigures
from recon.joint_problem import StackedMaps
from recon.operators.encoding import Encoding
from recon.plane import finish_plane
from recon.preparation import Preparation, Sink
from recon.scan import PlaneIndex


class HybridVolumes:
    """Encoding, data and judgement of volumes in hybrid space.

    Parameters
    ----------
    preparation : Preparation
    maps : StackedMaps
    """

    def __init__(self, preparation: Preparation, maps: StackedMaps) -> None:
        self.preparation, self.maps = preparation, maps
        self.figures = ResidualFigures(
            preparation.shape, preparation.whitening, preparation.scan.axes, is_volume=True
        )

    def measure(self, volume: PlaneIndex) -> tuple[Encoding, NDArray[Any]]:
        """E and y of one volume, in noise units and virtual coils."""
        preparation, scaled = self.preparation, self.maps.scaled
        data = np.empty_like(scaled)
        for x in range(data.shape[-1]):
            plane = preparation.load(volume._replace(slice=x))
            data[..., x] = preparation.compression.apply(plane.weighted)
        # lines were measured alike at every position
        mask = np.broadcast_to(plane.mask[..., np.newaxis], data.shape[1:])
        weights = None
        if plane.weights is not None:
            weights = np.broadcast_to(plane.weights[..., np.newaxis], data.shape[1:])
        return Encoding(scaled, mask, "volume", weights), data

    def finish(self, volume: PlaneIndex, u: NDArray[Any], sink: Sink) -> None:
        """Image units, residual and combination of one volume, position by position."""
        for x in range(u.shape[-1]):
            index = volume._replace(slice=x)
            plane = self.preparation.load(index)
            result = finish_plane(self.preparation, self._maps_at(x), u[..., x], plane, None)
            self.figures.see(index, result.residuals, plane.weighted, plane.mask)
            sink.write("image", index, result.image)
            sink.write("residual_image", index, result.residual_image)

    def _maps_at(self, x: int) -> CoilMaps:
        if self.preparation.map_method == "supplied":  # virtual coils do not hold all of their whitened form
            return self.preparation.make_maps(x)
        virtual = self.maps.scaled[..., x] * np.float32(self.preparation.kappa)
        return CoilMaps(virtual, self.preparation.compression.expand(virtual), self.maps.figures[x])
