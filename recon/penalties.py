"""Value and proximal map of each penalty, in plain NumPy.

The compiled loops of `recon.kernels` do the same inside the solver; these say it readably and are what the tests
compare those with. The nuclear norm is used as it stands.

A proximal map `prox(v, step)` minimises 1/2 ||x - v||^2 + step f(x), the weight of the penalty being inside f.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.operators.differences import Differences
from recon.operators.wavelet import Wavelet


def soft_threshold(v: NDArray[Any], threshold: float) -> NDArray[Any]:
    """Minimiser of 1/2 ||x - v||^2 + threshold ||x||_1 for complex x: v max(1 - threshold/|v|, 0).

    Parameters
    ----------
    v : complex ndarray
    threshold : float, >= 0

    Returns
    -------
    ndarray of the shape and dtype of `v`.
    """
    if threshold == 0:
        return v.copy()
    magnitude = np.abs(v)
    limit = magnitude.dtype.type(threshold)
    np.maximum(magnitude, limit, out=magnitude)
    np.divide(limit, magnitude, out=magnitude)
    np.subtract(1, magnitude, out=magnitude)
    shrunk: NDArray[Any] = v * magnitude
    return shrunk


def project_ball(p: NDArray[Any], radius: float) -> NDArray[Any]:
    """Nearest field with |p(r)| <= radius (> 0) at every pixel; p has shape (2, rows, columns); works in place."""
    magnitude = np.sqrt(p[0].real ** 2 + p[0].imag ** 2 + p[1].real ** 2 + p[1].imag ** 2)
    limit = magnitude.dtype.type(radius)
    np.maximum(magnitude, limit, out=magnitude)
    np.divide(limit, magnitude, out=magnitude)
    p *= magnitude
    return p


class WaveletL1:
    """f(x) = strength ||W x||_1 over the detail coefficients; the approximation is free."""

    def __init__(self, transform: Wavelet, strength: float) -> None:
        self.transform = transform
        self.strength = strength
        self._corner = tuple(slice(0, n) for n in transform.approximation_shape)

    def value(self, x: NDArray[Any]) -> float:
        """f(x) for a padded image."""
        return self._cost(self.transform.forward(x))

    def prox(self, v: NDArray[Any], step: float) -> tuple[NDArray[Any], float]:
        """Minimiser of 1/2 ||x - v||^2 + step f(x), exact since W is orthogonal; and f there."""
        coefficients = self.transform.forward(v)
        corner = coefficients[self._corner].copy()
        shrunk = soft_threshold(coefficients, step * self.strength)
        shrunk[self._corner] = corner
        return self.transform.adjoint(shrunk), self._cost(shrunk)

    def _cost(self, coefficients: NDArray[Any]) -> float:
        total = np.sum(np.abs(coefficients), dtype=np.float64)
        return self.strength * float(total - np.sum(np.abs(coefficients[self._corner]), dtype=np.float64))


class TotalVariation:
    """f(x) = strength sum_r sqrt(sum_a |D_a x(r)|^2), isotropic (Rudin, Osher & Fatemi 1992)."""

    def __init__(self, differences: Differences, strength: float) -> None:
        self.differences = differences
        self.strength = strength

    def value(self, x: NDArray[Any]) -> float:
        """f(x) for an image."""
        return self.cost(self.differences.forward(x))

    def cost(self, gradient: NDArray[Any]) -> float:
        """f(x) when D x is already at hand."""
        squares = np.sum(gradient.real**2 + gradient.imag**2, axis=0)
        return self.strength * float(np.sum(np.sqrt(squares), dtype=np.float64))


def nuclear_norm(x: NDArray[Any]) -> float:
    """||x||_*: the sum of singular values of the matrix (frame, pixel)."""
    return float(np.sum(np.sqrt(np.maximum(np.linalg.eigvalsh(_gram(x)), 0))))


def project_spectral(q: NDArray[Any], radius: float) -> NDArray[Any]:
    """Nearest matrix (frame, pixel) whose singular values are at most `radius`: the dual ball of the nuclear norm.

    The few frames make it an eigenproblem of a (frame, frame) matrix (Cai, Candes & Shen 2010).
    """
    values, vectors = np.linalg.eigh(_gram(q))
    scale = radius / np.maximum(np.sqrt(np.maximum(values, 0)), radius)
    shrink = ((vectors * scale) @ vectors.conj().T).astype(q.dtype)
    return np.asarray((shrink @ q.reshape(len(q), -1)).reshape(q.shape))


def _gram(x: NDArray[Any]) -> NDArray[np.complex128]:
    flat = x.reshape(len(x), -1)
    return np.asarray(flat @ flat.conj().T, np.complex128)
