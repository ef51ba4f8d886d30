"""From whitened planes to the problem that the solver takes: encoding, data, strengths."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.coils.maps import CoilMaps
from recon.operators.encoding import Encoding
from recon.operators.folded import FoldedEncoding
from recon.phase import remove_phase
from recon.preparation import Plane, Preparation
from recon.statement import Problem


def measurement(
    preparation: Preparation, maps: CoilMaps, planes: list[Plane]
) -> tuple[Encoding, NDArray[Any]]:
    """E and y of one plane, or of the frames of a series, in noise units and virtual coils.

    Parameters
    ----------
    preparation : Preparation
    maps : CoilMaps
        Shared by the planes; of two sets only with a single plane.
    planes : list of Plane
        Whitened samples of all coils; more than one is a series.

    Returns
    -------
    encoding : Encoding
        With the low-resolution phase of the image taken out where the image is constrained (see `recon.phase`).
    data : complex64 ndarray
        In the range of `encoding`.
    """
    encoding, data = _measured(preparation, maps, planes)
    if preparation.settings.constraint != "none":
        encoding = remove_phase(encoding, data)
    return encoding, data


def _measured(preparation: Preparation, maps: CoilMaps, planes: list[Plane]) -> tuple[Encoding, NDArray[Any]]:
    scaled = maps.virtual / np.float32(preparation.kappa)
    if maps.virtual.ndim == 4:
        ((samples, mask, weights, position),) = planes
        folded = FoldedEncoding(scaled, mask, weights)
        return folded, folded.to_range(preparation.compression_of(position).apply(samples))
    virtual = [preparation.compression_of(plane.position).apply(plane.kspace) for plane in planes]
    if len(planes) == 1:
        encoding = Encoding(scaled, planes[0].mask, weights=planes[0].weights)
        return encoding, encoding.to_range(virtual[0])
    weights = None
    if any(plane.weights is not None for plane in planes):
        weights = np.stack([plane.mask if plane.weights is None else plane.weights for plane in planes])
    masks = np.stack([plane.mask for plane in planes])
    encoding = Encoding(scaled[:, np.newaxis], masks, "series", weights)
    return encoding, encoding.to_range(np.stack(virtual, axis=1))


def make_problem(preparation: Preparation, maps: CoilMaps, planes: list[Plane]) -> Problem:
    """The compressed-sensing problem of `planes` with the strengths of the settings, see `measurement`."""
    settings = preparation.settings
    encoding, data = measurement(preparation, maps, planes)
    is_series = len(planes) > 1
    return Problem(
        encoding,
        data,
        settings.wavelet,
        float(settings.wavelet_strength),
        float(settings.tv_strength),
        float(settings.temporal_strength) if is_series else 0.0,
        float(settings.low_rank_strength) if is_series else 0.0,
        wavelet_shifts=settings.wavelet_shifts,
        constraint=settings.constraint,
    )
