"""Subspace eigenvector coil maps (Uecker et al. 2014), with automatic subspace and support.

Patches of calibration k-space span a subspace; at each pixel r the coil sensitivities S(r) are the eigenvector, with
eigenvalue one, of

    W(r) = 1/k^2 sum_{p, p'} T(p, p') exp(2 pi i (p - p') r / N),   T = projection on that subspace

where p, p' run over the positions of a k x k patch. W depends on p - p' alone, so T is summed along its diagonals
once, and W on any grid is one small Fourier sum. Where the object exceeds the field of view and folds onto itself two
eigenvalues are one: two sets of maps explain what one cannot.

The subspace is that of the singular vectors which noise alone does not explain; the support is where the eigenvalue is
no worse than where the calibration shows the object. Stein's unbiased risk estimate of the calibration, with which
Iyer et al. 2020 choose both, has its flat minimum at the same subspace on simulated scans of two heads, for several
times the work, and would leave hardly any pixel out: a tighter support has the smaller error.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from recon.coils.grids import interpolate, interpolate_directions
from recon.coils.low_resolution import object_pixels

#: side of the k-space patch.
KERNEL: Final = 6
#: where the noise is unknown, patches span the singular vectors above this fraction of the largest (common practice).
RELATIVE_SINGULAR_VALUE: Final = 0.02
#: and nowhere those below this fraction: in a scan almost free of noise they hold what the patch cannot.
SMALLEST_SINGULAR_VALUE: Final = 0.002
#: rounding of eigenvalues in single precision stays below a hundredth of a limit above this fraction of the largest.
SINGLE_PRECISION: Final = 1e-5
#: steps of the power iteration for the largest eigenvalue.
POWER_STEPS: Final = 30
#: maps are computed on a grid this many times finer than W's own bandwidth, then interpolated.
GRID_FACTOR: Final = 2
#: pixels of the low-resolution object, above this fraction of its largest magnitude, set the support ...
SUPPORT_LEVEL: Final = 0.05
#: ... all but this share of them is kept ...
LEFT_OUT: Final = 0.001
#: ... and the smallest eigenvalue kept lies between these.
SMALLEST_EIGENVALUE: Final = (0.85, 0.995)


@dataclass(frozen=True)
class EigenvectorMaps:
    """Maps of one slice and how they were found.

    Attributes
    ----------
    sets : complex64 (set, coil, rows, columns)
        sum_c |S_c|^2 = 1 for each set, zero where its eigenvalue is too small.
    eigenvalues : float32 (2, rows, columns)
        The two largest of W: the first is one inside the object, the second where the object folds onto itself.
    kernel : (int, int)
        Sides of the patch.
    subspace : int
        Singular vectors kept.
    threshold : float
        Smallest eigenvalue inside the support.
    """

    sets: NDArray[np.complex64]
    eigenvalues: NDArray[np.float32]
    kernel: tuple[int, int]
    subspace: int
    threshold: float


def eigenvector_maps(
    blocks: list[NDArray[Any]],
    shape: tuple[int, int],
    reference: NDArray[Any],
    *,
    has_noise_units: bool,
    sets: int = 1,
) -> EigenvectorMaps:
    """Coil maps of one slice.

    Parameters
    ----------
    blocks : list of complex (coil, rows, columns)
        Whitened calibration k-space; several frames or contrasts of the slice share one set of maps.
    shape : (rows, columns)
        Of the maps.
    reference : complex (coil)
        Direction whose projection is made real and positive at every pixel: it fixes the phase.
    has_noise_units : bool
        Whether the noise variance is one, so that its share of the singular values is known.
    sets : {1, 2}
        Sets of maps wanted. Of two, the first is the projection of the reference on both eigenvectors where both
        eigenvalues are near one: any mixture of them explains the data, and this one is smooth.
    """
    coils = blocks[0].shape[0]
    kernel = (
        min(KERNEL, *(block.shape[1] // 2 + 1 for block in blocks)),
        min(KERNEL, *(block.shape[2] // 2 + 1 for block in blocks)),
    )
    subspace = _signal_subspace(blocks, kernel, has_noise_units)
    lags = _lag_sums(subspace, kernel, coils)
    grid = (
        min(shape[0], GRID_FACTOR * 2 * (2 * kernel[0] - 1)),
        min(shape[1], GRID_FACTOR * 2 * (2 * kernel[1] - 1)),
    )
    values, vectors = np.linalg.eigh(_on_grid(lags, grid).reshape(-1, coils, coils))
    vectors = vectors.transpose(2, 1, 0)[::-1].reshape(coils, coils, *grid)
    coarse = np.zeros((2, *grid))
    coarse[: min(coils, 2)] = np.clip(values.T[::-1], 0, 1)[:2].reshape(-1, *grid)
    threshold = _threshold(coarse[0], blocks, has_noise_units)
    eigenvalues = interpolate(coarse, shape).astype(np.float32)
    directions, references, limits = [vectors[0]], [reference], [threshold]
    if sets == 2 and coils > 1:
        # mixed from a little below the threshold on, so that the first set has no edge where the second begins
        begin = 1 - 3 * (1 - threshold)
        share = np.clip((coarse[1] - begin) / (threshold - begin), 0, 1)
        directions = _mixed(vectors[0], vectors[1], share, reference)
        references, limits = [reference, _second_reference(blocks, reference)], [threshold, begin]
    found = []
    for direction, towards, eigenvalue, limit in zip(
        directions, references, eigenvalues, limits, strict=False
    ):
        along = direction * np.exp(-1j * np.angle(np.tensordot(towards.conj(), direction, axes=1)))
        found.append(normalised(interpolate_directions(along, shape, towards), eigenvalue >= limit))
    return EigenvectorMaps(np.stack(found), eigenvalues, kernel, subspace.shape[1], threshold)


def normalised(maps: NDArray[Any], inside: NDArray[np.bool_]) -> NDArray[np.complex64]:
    """Scale maps to sum_c |S_c|^2 = 1 inside, zero outside."""
    size = np.sqrt(np.sum(np.abs(maps) ** 2, axis=0))
    scale = np.divide(inside, size, out=np.zeros_like(size), where=size > 0)
    return np.asarray(maps * scale, np.complex64)


def _signal_subspace(
    blocks: list[NDArray[Any]], kernel: tuple[int, int], has_noise_units: bool
) -> NDArray[Any]:
    """Orthonormal basis (coil * k * k, rank) of the patches' signal.

    Noise of unit variance alone has no singular value above sqrt(patches) + sqrt(coil * k * k) (Marchenko & Pastur
    1967).
    """
    size = blocks[0].shape[0] * kernel[0] * kernel[1]
    gram = np.zeros((size, size), np.complex128)
    patches = 0
    for block in blocks:
        windows = np.lib.stride_tricks.sliding_window_view(block, kernel, axis=(1, 2))
        columns = windows.transpose(0, 3, 4, 1, 2).reshape(size, -1).astype(np.complex128)
        gram += columns @ columns.conj().T
        patches += columns.shape[1]
    largest = _largest_eigenvalue(gram)
    if largest == 0:
        return np.eye(size, 1, dtype=np.complex128)
    fraction = SMALLEST_SINGULAR_VALUE if has_noise_units else RELATIVE_SINGULAR_VALUE
    noise = np.sqrt(patches) + np.sqrt(size) if has_noise_units else 0.0
    limit = min(max(fraction**2 * largest, noise**2), 0.99 * largest) / largest
    # single precision halves the time, and is enough where its rounding is far below what is kept
    kind = np.complex64 if limit > SINGLE_PRECISION else np.complex128
    _, vectors = scipy.linalg.eigh(
        (gram / largest).astype(kind), driver="evr", subset_by_value=(limit, np.inf), check_finite=False
    )
    return np.asarray(vectors, np.complex128)


def _largest_eigenvalue(gram: NDArray[Any]) -> float:
    """By power iteration, to some thousandths: a limit is all that depends on it."""
    vector = gram[:, int(np.argmax(np.diag(gram).real))]
    value = 0.0
    for _ in range(POWER_STEPS):
        size = float(np.linalg.norm(vector))
        if size == 0:
            return 0.0
        vector = gram @ (vector / size)
        value = float(np.linalg.norm(vector))
    return value


def _threshold(eigenvalue: NDArray[Any], blocks: list[NDArray[Any]], has_noise_units: bool) -> float:
    """Smallest eigenvalue of the low-resolution object's pixels, but for the worst of them."""
    smallest, largest = SMALLEST_EIGENVALUE
    is_object = object_pixels(blocks, SUPPORT_LEVEL, has_noise_units=has_noise_units)
    if not is_object.any():
        return smallest
    there = interpolate(eigenvalue, (is_object.shape[0], is_object.shape[1]))[is_object]
    return float(np.clip(np.quantile(there, LEFT_OUT), smallest, largest))


def _mixed(
    first: NDArray[Any], second: NDArray[Any], share: NDArray[Any], reference: NDArray[Any]
) -> list[NDArray[Any]]:
    """Orthonormal mixtures of two eigenvectors: the projection of the reference, and what is left."""
    a = np.tensordot(reference.conj(), first, axes=1).conj()
    b = share * np.tensordot(reference.conj(), second, axes=1).conj()
    size = np.hypot(np.abs(a), np.abs(b))
    a = np.divide(a, size, out=np.ones_like(a), where=size > 0)
    b = np.divide(b, size, out=np.zeros_like(b), where=size > 0)
    return [a * first + b * second, a.conj() * second - b.conj() * first]


def _second_reference(blocks: list[NDArray[Any]], reference: NDArray[Any]) -> NDArray[Any]:
    """Dominant singular vector of the calibration data but for the first reference, its largest entry positive."""
    coils = len(reference)
    gram = np.zeros((coils, coils), np.complex128)
    for block in blocks:
        samples = block.reshape(coils, -1).astype(np.complex128)
        gram += samples @ samples.conj().T
    unit = reference / np.linalg.norm(reference)
    rest = np.eye(coils) - np.outer(unit, unit.conj())
    vector = np.linalg.eigh(rest @ gram @ rest)[1][:, -1]
    return np.asarray(vector * np.exp(-1j * np.angle(vector[np.argmax(np.abs(vector))])))


def _lag_sums(subspace: NDArray[Any], kernel: tuple[int, ...], coils: int) -> NDArray[Any]:
    """Sum of the projection over equal lags p - p': (2k-1, 2k-1, coil, coil), lag zero at index k-1.

    The correlation over patch positions is a product in Fourier space, padded so that lags do not wrap.
    """
    spans = tuple(2 * k - 1 for k in kernel)
    basis = subspace.reshape(coils, *kernel, -1)
    spectrum = np.fft.fft2(basis, s=spans, axes=(1, 2))
    power = np.einsum("cxyr,dxyr->xycd", spectrum, spectrum.conj(), optimize=True)
    lags = np.fft.ifft2(power, axes=(0, 1))
    return np.fft.fftshift(lags, axes=(0, 1)) / (kernel[0] * kernel[1])


def _on_grid(lags: NDArray[Any], grid: tuple[int, ...]) -> NDArray[Any]:
    """W at the points of a grid over the field of view: (rows, columns, coil, coil)."""
    matrices = lags
    for axis, n in enumerate(grid):
        span = lags.shape[axis]
        position = (np.arange(n) - n // 2) / n
        lag = np.arange(span) - span // 2
        wave = np.exp(2j * np.pi * np.outer(position, lag))
        matrices = np.moveaxis(np.tensordot(wave, matrices, axes=(1, axis)), 0, axis)
    return matrices
