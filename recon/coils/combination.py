"""Combining coil images into one."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray


def sensitivity_weighted(images: NDArray[Any], maps: NDArray[Any]) -> NDArray[Any]:
    """Optimal combination of whitened coil images, S^H m_c / (S^H S), zero where S is (Roemer et al. 1990, eq. 30).

    Parameters
    ----------
    images, maps : complex (coil, rows, columns)
        Both whitened.

    Returns
    -------
    complex (rows, columns), with SNR sqrt(S^H Psi^-1 S) in the unwhitened coils' terms.
    """
    weight = np.sum(np.abs(maps) ** 2, axis=0)
    combined = np.sum(maps.conj() * images, axis=0)
    return np.asarray(np.divide(combined, weight, out=np.zeros_like(combined), where=weight > 0))


def root_sum_of_squares(images: NDArray[Any]) -> NDArray[Any]:
    """sqrt(sum_c |m_c|^2), real-valued magnitude in the images' complex dtype (Roemer et al. 1990)."""
    return np.asarray(np.sqrt(np.sum(np.abs(images) ** 2, axis=0)), images.dtype)


def coil_images(image: NDArray[Any], maps: NDArray[Any]) -> NDArray[Any]:
    """S_c m, or sum_j S_cj m_j, (coil, rows, columns).

    Parameters
    ----------
    image : complex (rows, columns) or (set, rows, columns)
    maps : complex (coil, rows, columns) or (set, coil, rows, columns)
    """
    if maps.ndim == 3:
        return np.asarray(maps * image)
    return np.asarray(np.sum(maps * image[:, np.newaxis], axis=0))


def combine_sets(images: NDArray[Any]) -> NDArray[Any]:
    """Magnitude sqrt(sum_j |m_j|^2) with the phase of the first; one image (rows, columns) stays as it is.

    Parameters
    ----------
    images : complex (rows, columns) or (set, rows, columns)
        Of one plane, an image for each set of maps.
    """
    if images.ndim == 2:
        return images
    magnitude = np.sqrt(np.sum(np.abs(images) ** 2, axis=0))
    return np.asarray(magnitude * np.exp(1j * np.angle(images[0])), images.dtype)
