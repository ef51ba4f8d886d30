"""Centred unitary Fourier transforms: DC at index n//2 on every axis, ||F x|| = ||x||.

    F x (k) = 1/sqrt(N) sum_r x(r) exp(-2 pi i (k - N//2)(r - N//2) / N)

(Bracewell, The Fourier Transform and Its Applications.) Image = inverse transform of k-space.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.operators.base import LinearOperator


def transform(image: NDArray[Any], axes: Sequence[int] = (-2, -1)) -> NDArray[Any]:
    """Centred unitary FFT over `axes`, from image to k-space; shape and precision are kept."""
    spectrum = scipy.fft.fftn(np.fft.ifftshift(image, axes=axes), axes=axes, norm="ortho", overwrite_x=True)
    return np.fft.fftshift(spectrum, axes=axes)


def inverse_transform(kspace: NDArray[Any], axes: Sequence[int] = (-2, -1)) -> NDArray[Any]:
    """Centred unitary inverse FFT over `axes`, from k-space to image; shape and precision are kept."""
    image = scipy.fft.ifftn(np.fft.ifftshift(kspace, axes=axes), axes=axes, norm="ortho", overwrite_x=True)
    return np.fft.fftshift(image, axes=axes)


class Fourier(LinearOperator):
    """The transform as an operator on arrays of a given shape."""

    def __init__(self, shape: tuple[int, ...], axes: Sequence[int] = (-2, -1)) -> None:
        self.domain_shape = self.range_shape = shape
        self.axes = tuple(axes)

    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """Image to k-space."""
        return transform(x, self.axes)

    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """k-space to image: the transform is unitary, so the adjoint is the inverse."""
        return inverse_transform(y, self.axes)


def crop_centre(array: NDArray[Any], size: int, axis: int = -1) -> NDArray[Any]:
    """Keep the `size` entries about index n//2 of one axis, so that index n//2 becomes size//2."""
    start = array.shape[axis] // 2 - size // 2
    return np.take(array, range(start, start + size), axis=axis)


def zero_fill(images: NDArray[Any], shape: Sequence[int]) -> NDArray[Any]:
    """Interpolate images to a finer matrix over the same field of view by filling k-space with zeros.

    Index n//2 stays in place, and values keep their scale (the unitary transforms alone would change it by
    sqrt(pixels before / pixels after)).

    Parameters
    ----------
    images : complex (..., *coarse shape)
    shape : sequence of int
        Of the last axes, none smaller than before.
    """
    coarse = images.shape[images.ndim - len(shape) :]
    axes = tuple(range(-len(shape), 0))
    padded = np.zeros((*images.shape[: images.ndim - len(shape)], *shape), images.dtype)
    starts = (n // 2 - m // 2 for n, m in zip(shape, coarse, strict=True))
    window: tuple[Any, ...] = tuple(slice(start, start + m) for start, m in zip(starts, coarse, strict=True))
    padded[(..., *window)] = transform(images, axes)
    scale = images.real.dtype.type(np.sqrt(np.prod(shape) / np.prod(coarse)))
    return np.asarray(inverse_transform(padded, axes) * scale)


def crop_readout(kspace: NDArray[Any], columns: int) -> NDArray[Any]:
    """Remove readout oversampling: transform the last axis, keep the central field of view, transform back.

    Noise stays white with the same variance, and image values stay the same, since both transforms are unitary.
    """
    if columns == kspace.shape[-1]:
        return kspace
    return transform(crop_centre(inverse_transform(kspace, (-1,)), columns), (-1,))
