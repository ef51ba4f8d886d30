"""Does the image agree with what was measured? Residual figures in noise units.

    r = y - P F (S m)   in whitened physical coils;   reduced chi-squared = sum |r|^2 / M,  M complex samples

A reduced chi-squared near one says that what the image leaves unexplained is as large as the noise. Coil compression
plays no part here: the residual is taken in all coils.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.axes import OUTER_AXES
from recon.coils.combination import coil_images, sensitivity_weighted
from recon.coils.noise import Whitening, mix
from recon.operators.fourier import inverse_transform, transform
from recon.scan import PlaneIndex

#: width of a k-space ring, as a fraction of the distance from the centre to the edge.
RING_WIDTH: Final = 0.1
#: the readout positions of a volume are told in this many groups at most.
READOUT_GROUPS: Final = 16


def residual(
    image: NDArray[Any], whitened_maps: NDArray[Any], kspace: NDArray[Any], mask: NDArray[np.bool_]
) -> NDArray[Any]:
    """r = y - P F (S_c m), zero where not sampled.

    Parameters
    ----------
    image : complex (rows, columns) or (set, rows, columns)
        m, in the object's intensity.
    whitened_maps : complex (coil, rows, columns) or (set, coil, rows, columns)
    kspace : complex (coil, rows, columns)
    mask : bool (rows, columns)
    """
    return np.where(mask, kspace - transform(coil_images(image, whitened_maps)), 0)


def residual_image(residuals: NDArray[Any], whitened_maps: NDArray[Any]) -> NDArray[Any]:
    """Sensitivity-weighted inverse transform of the residual, in the image's units: (rows, columns), after any set."""
    images = inverse_transform(residuals)
    if whitened_maps.ndim == 3:
        return sensitivity_weighted(images, whitened_maps)
    return np.stack([sensitivity_weighted(images, maps) for maps in whitened_maps])


class ResidualFigures:
    """Sums residuals plane by plane and turns them into figures.

    Parameters
    ----------
    shape : (rows, columns) or (slabs, rows, columns)
        Of a plane; or of a volume that comes in slabs, their `slice` being the first axis.
    whitening : Whitening
        Made from n samples: its whitener carries the correction for that, and `by_coil`, which divides by each coil's
        estimated variance instead, is corrected by (n - 1) / n.
    sizes : dict
        Lengths of the scan's outer axes.
    is_volume : bool
        Whether slices are the readout positions of a volume, which are told in a few groups.
    """

    def __init__(
        self, shape: tuple[int, ...], whitening: Whitening, sizes: dict[str, int], *, is_volume: bool = False
    ) -> None:
        self.is_volume = is_volume
        self.whitening = whitening
        coils = len(whitening.covariance)
        self.coil_correction = (whitening.samples - 1) / whitening.samples if whitening.samples > 1 else 1.0
        self._from_slab = _normalised_distance(shape[0]) if len(shape) == 3 else None
        self._radius = np.hypot(
            _normalised_distance(shape[-2])[:, np.newaxis], _normalised_distance(shape[-1])
        )
        self._last_ring = int(np.sqrt(len(shape)) / RING_WIDTH)
        self.rings = self._last_ring + 1
        self.by_ring = np.zeros((2, self.rings))
        self.by_coil = np.zeros((2, coils))
        self.by_outer = {axis: np.zeros((2, sizes[axis])) for axis in OUTER_AXES if axis in sizes}
        self.total = np.zeros(2)
        self.energy = 0.0

    def see(
        self, index: PlaneIndex, residuals: NDArray[Any], kspace: NDArray[Any], mask: NDArray[np.bool_]
    ) -> None:
        """Take in the whitened residual of one plane, (coil, rows, columns)."""
        squares = np.abs(residuals) ** 2
        per_position = squares.sum(axis=0, dtype=np.float64)
        coils, positions = len(residuals), int(mask.sum())
        whole = np.array([per_position.sum(), coils * positions])
        self.total += whole
        self.energy += float(np.sum(np.abs(kspace[:, mask]) ** 2, dtype=np.float64))
        rings = self._rings(index.slice)[mask]
        self.by_ring[0] += np.bincount(rings, per_position[mask], self.rings)
        self.by_ring[1] += coils * np.bincount(rings, minlength=self.rings)
        physical = mix(self.whitening.unwhitener, residuals)
        self.by_coil[0] += np.sum(np.abs(physical) ** 2, axis=(1, 2), dtype=np.float64)
        self.by_coil[1] += positions * np.real(np.diag(self.whitening.covariance))
        for axis, sums in self.by_outer.items():
            sums[:, getattr(index, axis)] += whole

    def _rings(self, position: int) -> NDArray[np.int64]:
        """Ring of every position of a plane, or of a slab."""
        radius = self._radius
        if self._from_slab is not None:
            radius = np.hypot(radius, self._from_slab[position])
        return np.minimum((radius / RING_WIDTH + 1e-9).astype(np.int64), self._last_ring)

    def as_dict(self) -> dict[str, Any]:
        """The report's `consistency`; chi-squared figures are null where the scan is free of noise."""
        relative = float(np.sqrt(self.total[0] / self.energy)) if self.energy > 0 else 0.0
        if not self.whitening.has_noise_units:
            return {"reduced_chi_squared": None, "relative_residual": relative}
        rings = [
            {
                "from": round(ring * RING_WIDTH, 6),
                "to": round((ring + 1) * RING_WIDTH, 6),
                "value": float(self.by_ring[0, ring] / self.by_ring[1, ring]),
                "samples": int(self.by_ring[1, ring]),
            }
            for ring in range(self.rings)
            if self.by_ring[1, ring] > 0
        ]
        figures: dict[str, Any] = {
            "value": float(self.total[0] / self.total[1]),
            "samples": int(self.total[1]),
            "by_coil": _ratios(self.by_coil, self.coil_correction),
            "by_ring": rings,
        }
        for axis, sums in self.by_outer.items():
            if axis == "slice" and self.is_volume:
                figures["by_readout_position"] = _grouped(sums)
            else:
                figures[f"by_{axis}"] = _ratios(sums)
        return {"reduced_chi_squared": figures, "relative_residual": relative}


def _grouped(sums: NDArray[Any]) -> list[dict[str, Any]]:
    """Neighbouring positions together, so that a report does not grow with the matrix."""
    positions = sums.shape[1]
    edges = np.linspace(0, positions, min(positions, READOUT_GROUPS) + 1).astype(int)
    return [
        {
            "from": int(start),
            "to": int(end),
            "value": _ratios(sums[:, start:end].sum(axis=1, keepdims=True))[0],
            "samples": int(sums[1, start:end].sum()),
        }
        for start, end in pairwise(edges)
    ]


def _ratios(sums: NDArray[Any], correction: float = 1.0) -> list[float | None]:
    return [correction * float(a / b) if b > 0 else None for a, b in sums.T]


def _normalised_distance(n: int) -> NDArray[np.float64]:
    return np.asarray((np.arange(n) - n // 2) / max(n / 2, 1))
