"""Test objects whose k-space is known in closed form: ellipses, seen through smooth maps.

The uniform ellipse with semi-axes ``a, b``, centre ``c`` and value ``v`` has the Fourier transform
``v exp(-2 pi i nu.c) a b J1(2 pi K) / K`` with ``K = |(a nu.e1, b nu.e2)|`` (Bracewell, The Fourier
Transform and Its Applications; Van de Walle et al. 1997), so nothing is sampled and no error of a pixel
grid enters. A map that is a finite Fourier series only shifts that transform, so k-space of an object
seen through coil maps and with phase stays exact as well.

Conventions. The field of view is the square ``[-1, 1) x [-1, 1)``; positions and semi-axes are in halves
of the field of view. Sample ``j`` of an axis of length ``n`` lies at ``(j - n // 2) * 2 / n``: pixel
centres are at these points, so the origin is the centre of pixel ``n // 2``. Rows run along ``+y`` and
columns along ``+x``. k-space index ``i`` of an axis is ``i - n // 2`` cycles per field of view. The
scaling is unitary: the orthonormal inverse FFT approximates the object sampled at the pixel centres.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.special import j1

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Maps are Fourier series with a period of two fields of view, twice the object's box, so that a map
# need not be the same at opposite edges of the picture.
STEPS_PER_CYCLE = 2


@dataclass(frozen=True)
class Ellipse:
    """A uniform ellipse; where ellipses overlap their values add.

    Parameters
    ----------
    value : complex
        Added inside the ellipse.
    centre : (float, float)
        ``(x, y)`` in halves of the field of view.
    semi_axes : (float, float)
        Along the ellipse's own first and second axis, in halves of the field of view.
    angle : float
        Degrees from the ``x`` axis to the first axis, positive towards ``y``.
    """

    value: complex
    centre: tuple[float, float]
    semi_axes: tuple[float, float]
    angle: float = 0.0

    def __post_init__(self) -> None:
        if min(self.semi_axes) <= 0:
            raise ValueError(f"ellipse semi-axes are {self.semi_axes}; give two positive numbers")


class SmoothMap:
    """A finite Fourier series, ``s(x, y) = sum_pq c[p, q] exp(i pi (p y + q x) / 2)``.

    Parameters
    ----------
    coefficients : array_like, shape (2 m + 1, 2 m + 1), complex
        ``c[p + m, q + m]`` belongs to ``p`` half cycles per field of view along ``y`` and ``q`` along ``x``.
    """

    def __init__(self, coefficients: Sequence[Sequence[complex]] | Complex) -> None:
        c = np.asarray(coefficients, dtype=np.complex128)
        if c.ndim != 2 or c.shape[0] != c.shape[1] or c.shape[0] % 2 == 0:
            raise ValueError(f"map coefficients have shape {c.shape}; give a square array of odd size")
        self.coefficients = c

    @property
    def order(self) -> int:
        """Highest frequency, in half cycles per field of view."""
        return int(self.coefficients.shape[0]) // 2

    def __mul__(self, other: SmoothMap) -> SmoothMap:
        """Return the product of two maps, whose series is the convolution of theirs."""
        size = 2 * (self.order + other.order) + 1
        product = np.zeros((size, size), dtype=np.complex128)
        n = other.coefficients.shape[0]
        for (p, q), c in np.ndenumerate(self.coefficients):
            product[p : p + n, q : q + n] += c * other.coefficients
        return SmoothMap(product)

    def on_grid(self, shape: tuple[int, int]) -> Complex:
        """Return the map at the pixel centres, shape ``(rows, columns)``, complex128."""
        frequencies = np.pi / STEPS_PER_CYCLE * np.arange(-self.order, self.order + 1)
        y, x = pixel_centres(shape[0]), pixel_centres(shape[1])
        return (
            np.exp(1j * np.outer(y, frequencies)) @ self.coefficients @ np.exp(1j * np.outer(frequencies, x))
        )


def pixel_centres(n: int) -> Real:
    """Return ``(j - n // 2) * 2 / n`` for ``j = 0 .. n - 1``: positions in halves of the field of view."""
    return np.asarray((np.arange(n) - n // 2) * (2.0 / n), dtype=np.float64)


def ellipse_spectrum(ellipses: Iterable[Ellipse], ky: Real, kx: Real) -> Complex:
    """Return the integral of ``f(x, y) exp(-i pi (kx x + ky y))`` for a sum ``f`` of ellipses.

    Parameters
    ----------
    ellipses : iterable of Ellipse
    ky, kx : ndarray, shapes (rows,) and (columns,), float64
        Cycles per field of view; fractions are allowed.

    Returns
    -------
    ndarray, shape (rows, columns), complex128
        In units of value times (half field of view) squared.

    References
    ----------
    Van de Walle R, Barrett HH, Myers KJ et al. (1997) on analytic MR data of Shepp-Logan objects.
    """
    # Half a field of view is the unit of length, so k cycles per field of view are k / 2 per unit.
    v, u = np.asarray(ky, dtype=np.float64)[:, None] / 2, np.asarray(kx, dtype=np.float64)[None, :] / 2
    total = np.zeros((v.shape[0], u.shape[1]), dtype=np.complex128)
    for ellipse in ellipses:
        (x, y), (a, b) = ellipse.centre, ellipse.semi_axes
        cosine, sine = math.cos(math.radians(ellipse.angle)), math.sin(math.radians(ellipse.angle))
        radius = np.hypot(a * (cosine * u + sine * v), b * (cosine * v - sine * u))
        at_zero = radius < 1e-9  # J1(z) / z differs from 1/2 by z^2 / 16 there: below rounding
        safe = np.where(at_zero, 1.0, radius)
        disc = np.where(at_zero, np.pi, j1(2 * np.pi * safe) / safe)
        shift = np.exp(-2j * np.pi * y * v) * np.exp(-2j * np.pi * x * u)
        total += (ellipse.value * a * b) * disc * shift
    return total


def ellipse_kspace(
    ellipses: Iterable[Ellipse], shape: tuple[int, int], *, maps: Sequence[SmoothMap] | None = None
) -> Complex:
    """Return exact k-space of ellipses, seen through each of the maps if there are any.

    ``y_c[k] = sqrt(rows columns) / 4 * integral of s_c(r) f(r) exp(-i pi k.r) dr``

    Parameters
    ----------
    ellipses : iterable of Ellipse
    shape : (int, int)
        Rows (``ky``) and columns (``kx``); DC is at index ``n // 2``.
    maps : sequence of SmoothMap, optional
        Coil maps, with the object's phase multiplied in where wanted.

    Returns
    -------
    ndarray, shape (rows, columns), or (maps, rows, columns) where maps are given, complex128
    """
    rows, columns = shape
    scale = math.sqrt(rows * columns) / 4
    order = max((m.order for m in maps), default=0) if maps is not None else 0

    # All shifted transforms of all maps lie on one lattice with half-cycle steps: it is evaluated once.
    def lattice(n: int) -> Real:
        steps = STEPS_PER_CYCLE * (n - 1) + 2 * order + 1
        return (np.arange(steps) - order) / STEPS_PER_CYCLE - n // 2

    fine = scale * ellipse_spectrum(ellipses, lattice(rows), lattice(columns))
    if maps is None:
        return fine[::STEPS_PER_CYCLE, ::STEPS_PER_CYCLE]
    kspace = np.zeros((len(maps), rows, columns), dtype=np.complex128)
    for out, smooth in zip(kspace, maps, strict=True):
        for (p, q), c in np.ndenumerate(smooth.coefficients):
            if c:  # exp(i pi p y / 2) moves the transform up by p / 2 cycles
                top, left = order - (p - smooth.order), order - (q - smooth.order)
                stop_row, stop_column = top + STEPS_PER_CYCLE * rows, left + STEPS_PER_CYCLE * columns
                out += c * fine[top:stop_row:STEPS_PER_CYCLE, left:stop_column:STEPS_PER_CYCLE]
    return kspace


def rasterise(
    ellipses: Iterable[Ellipse],
    shape: tuple[int, int],
    *,
    supersampling: int = 1,
    centre: Literal["dc", "middle"] = "dc",
) -> Complex:
    """Return the sum of ellipses at the pixel centres, or its mean over sub-pixels.

    Parameters
    ----------
    ellipses : iterable of Ellipse
    shape : (int, int)
        Rows and columns.
    supersampling : int
        Each pixel is the mean of this many points along each axis, placed evenly about its centre.
    centre : {"dc", "middle"}
        Whether the origin is the centre of pixel ``n // 2`` (the convention of the Fourier transform) or
        the middle of the picture, ``(n - 1) / 2`` (the usual rasterised phantom).

    Returns
    -------
    ndarray, shape (rows, columns), complex128
    """
    if supersampling < 1:
        raise ValueError(f"supersampling is {supersampling}; give an integer of 1 or more")

    def positions(n: int) -> Real:
        pixels = np.arange(n) - (n // 2 if centre == "dc" else (n - 1) / 2)
        points = (np.arange(supersampling) + 0.5) / supersampling - 0.5
        return (pixels[:, None] + points[None, :]).ravel() * (2.0 / n)

    y, x = positions(shape[0])[:, None], positions(shape[1])[None, :]
    fine = np.zeros((y.size, x.size), dtype=np.complex128)
    for ellipse in ellipses:
        cosine, sine = math.cos(math.radians(ellipse.angle)), math.sin(math.radians(ellipse.angle))
        dx, dy = x - ellipse.centre[0], y - ellipse.centre[1]
        a, b = ellipse.semi_axes
        inside = ((cosine * dx + sine * dy) / a) ** 2 + ((cosine * dy - sine * dx) / b) ** 2 <= 1
        fine[inside] += ellipse.value
    blocks = fine.reshape(shape[0], supersampling, shape[1], supersampling)
    mean: Complex = blocks.mean(axis=(1, 3))
    return mean


def shepp_logan(contrast: Literal["original", "modified"] = "original") -> tuple[Ellipse, ...]:
    """Return the ten ellipses of the Shepp-Logan head section.

    References
    ----------
    Shepp LA, Logan BF (1974). The Fourier reconstruction of a head section. IEEE Trans. Nucl. Sci. 21,
    21-43, table of ten ellipses. ``modified`` keeps the geometry and raises the contrast as in Toft P
    (1996), The Radon Transform: Theory and Implementation, PhD thesis, Technical University of Denmark.
    """
    geometry = (
        ((0.0, 0.0), (0.69, 0.92), 0.0),
        ((0.0, -0.0184), (0.6624, 0.874), 0.0),
        ((0.22, 0.0), (0.11, 0.31), -18.0),
        ((-0.22, 0.0), (0.16, 0.41), 18.0),
        ((0.0, 0.35), (0.21, 0.25), 0.0),
        ((0.0, 0.1), (0.046, 0.046), 0.0),
        ((0.0, -0.1), (0.046, 0.046), 0.0),
        ((-0.08, -0.605), (0.046, 0.023), 0.0),
        ((0.0, -0.605), (0.023, 0.023), 0.0),
        ((0.06, -0.605), (0.023, 0.046), 0.0),
    )
    if contrast == "original":
        values = (2.0, -0.98, -0.02, -0.02, 0.01, 0.01, 0.01, 0.01, 0.01, 0.01)
    elif contrast == "modified":
        values = (1.0, -0.8, -0.2, -0.2, 0.1, 0.1, 0.1, 0.1, 0.1, 0.1)
    else:
        raise ValueError(f"contrast is {contrast!r}; give 'original' or 'modified'")
    return tuple(Ellipse(v, *g) for v, g in zip(values, geometry, strict=True))


def ring_coils(count: int, *, distance: float = 1.25, sharpness: int = 2) -> list[SmoothMap]:
    """Return smooth maps of coils standing evenly on a ring about the object.

    ``s_c(r) = exp(i t_c) prod over axes of cos^(2 p)(pi (r - r_c) / 4)``, with the coil at angle ``t_c`` and
    ``p`` the sharpness: one at the coil, falling smoothly with distance, each with a phase of its own.

    Parameters
    ----------
    count : int
        Number of coils.
    distance : float
        Radius of the ring in halves of the field of view.
    sharpness : int
        Order of the Fourier series; larger is more local.
    """
    if count < 1 or sharpness < 1:
        raise ValueError(f"count is {count} and sharpness {sharpness}; give integers of 1 or more")
    m = np.arange(-sharpness, sharpness + 1)
    weights = np.array([math.comb(2 * sharpness, sharpness + k) for k in m]) / 4.0**sharpness
    maps = []
    for c in range(count):
        angle = 2 * math.pi * (c + 0.5) / count
        x, y = distance * math.cos(angle), distance * math.sin(angle)
        along_y = weights * np.exp(-1j * np.pi / STEPS_PER_CYCLE * m * y)
        along_x = weights * np.exp(-1j * np.pi / STEPS_PER_CYCLE * m * x)
        maps.append(SmoothMap(np.exp(1j * angle) * np.outer(along_y, along_x)))
    return maps


def wave_phase(strength: float, cycles: tuple[int, int], offset: float = 0.0) -> SmoothMap:
    """Return ``1 + i strength cos(pi (p y + q x) / 2 + offset)``, a smooth phase of up to atan(strength).

    Parameters
    ----------
    strength : float
        Largest tangent of the phase; the magnitude rises to ``sqrt(1 + strength^2)`` with it.
    cycles : (int, int)
        ``p`` along ``y`` and ``q`` along ``x``, half cycles per field of view.
    offset : float
        Radians.
    """
    order = max(abs(cycles[0]), abs(cycles[1]))
    c = np.zeros((2 * order + 1, 2 * order + 1), dtype=np.complex128)
    c[order, order] = 1
    c[order + cycles[0], order + cycles[1]] += 0.5j * strength * np.exp(1j * offset)
    c[order - cycles[0], order - cycles[1]] += 0.5j * strength * np.exp(-1j * offset)
    return SmoothMap(c)
