"""Compiled inner loops of the solver: each does in one pass over memory what NumPy would do in five to ten.

All arrays are float32 views of complex64 ones (real and imaginary parts interleaved along the last axis), three axes
deep; a plane is a volume of one slab. The plain NumPy forms in `recon.operators` and `recon.penalties` say the same in
a readable way and are what the tests compare these with. The global interpreter lock is released, so planes can be
solved in threads.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

import numba
import numpy as np
from numpy.typing import NDArray

Real = NDArray[Any]
Kernel = TypeVar("Kernel", bound=Callable[..., Any])


def _compiled(function: Kernel) -> Kernel:
    """Compile at first use; machine code is kept beside the source or in the user's cache folder."""
    options: dict[str, Any] = {"fastmath": True, "nogil": True, "boundscheck": False, "error_model": "numpy"}
    try:
        compiled: Kernel = numba.njit(cache=True, **options)(function)
    except RuntimeError:  # neither folder can be written: compile anew in each process
        compiled = numba.njit(**options)(function)
    return compiled


@_compiled
def filter_axis0(x: Real, out: Real, rows: int, width: int, low: Real, high: Real) -> None:
    """One level of periodized analysis along the first axis of the leading block: out = (low half, high half).

    low_i = sum_t low[t] x[2 i + L/2 - t], and so for high; indices wrap (PyWavelets' periodization).
    """
    length, half = low.size, rows // 2
    for i in range(half):
        a, b = out[i], out[half + i]
        for j in range(width):
            a[j] = 0
            b[j] = 0
        for t in range(0, length, 2):
            first, second = x[(2 * i + length // 2 - t) % rows], x[(2 * i + length // 2 - t - 1) % rows]
            l0, l1, h0, h1 = low[t], low[t + 1], high[t], high[t + 1]
            for j in range(width):
                a[j] += l0 * first[j] + l1 * second[j]
                b[j] += h0 * first[j] + h1 * second[j]


@_compiled
def merge_axis0(x: Real, out: Real, rows: int, width: int, low: Real, high: Real) -> None:
    """The adjoint, and inverse, of `filter_axis0`."""
    length, half = low.size, rows // 2
    for r in range(rows):
        o = out[r]
        for j in range(width):
            o[j] = 0
        for t in range((length // 2 - r) % 2, length, 2):
            i = ((r - length // 2 + t) // 2) % half
            a, b, l0, h0 = x[i], x[half + i], low[t], high[t]
            for j in range(width):
                o[j] += l0 * a[j] + h0 * b[j]


@_compiled
def filter_axis1(x: Real, rows: int, width: int, low: Real, high: Real, even: Real, odd: Real) -> None:
    """The same along the second axis, in place; `even` and `odd` hold one row's samples, extended to both sides."""
    length, half = low.size, width // 4
    for r in range(rows):
        row = x[r]
        for i in range(-length, half + length):
            k = i % half
            even[2 * (i + length)] = row[4 * k]
            even[2 * (i + length) + 1] = row[4 * k + 1]
            odd[2 * (i + length)] = row[4 * k + 2]
            odd[2 * (i + length) + 1] = row[4 * k + 3]
        for j in range(width):
            row[j] = 0
        a, b = row[: 2 * half], row[2 * half : width]
        for t in range(length):
            shift = length // 2 - t
            start = 2 * (shift // 2 + length)
            source = even[start : start + 2 * half] if shift % 2 == 0 else odd[start : start + 2 * half]
            l0, h0 = low[t], high[t]
            for j in range(2 * half):
                a[j] += l0 * source[j]
                b[j] += h0 * source[j]


@_compiled
def merge_axis1(
    x: Real, rows: int, width: int, low: Real, high: Real, first: Real, second: Real, even: Real, odd: Real
) -> None:
    """The adjoint, and inverse, of `filter_axis1`, in place."""
    length, half = low.size, width // 4
    for r in range(rows):
        row = x[r]
        for i in range(-length, half + length):
            k = i % half
            first[2 * (i + length)] = row[2 * k]
            first[2 * (i + length) + 1] = row[2 * k + 1]
            second[2 * (i + length)] = row[2 * (half + k)]
            second[2 * (i + length) + 1] = row[2 * (half + k) + 1]
        for j in range(2 * half):
            even[j] = 0
            odd[j] = 0
        for t in range(length):
            shift = length // 2 - t
            start = 2 * (length - shift // 2)
            a, b = first[start : start + 2 * half], second[start : start + 2 * half]
            l0, h0 = low[t], high[t]
            target = even if shift % 2 == 0 else odd
            for j in range(2 * half):
                target[j] += l0 * a[j] + h0 * b[j]
        for k in range(half):
            row[4 * k] = even[2 * k]
            row[4 * k + 1] = even[2 * k + 1]
            row[4 * k + 2] = odd[2 * k]
            row[4 * k + 3] = odd[2 * k + 1]


@_compiled
def filter_slabs(x: Real, slabs: int, rows: int, width: int, low: Real, high: Real, is_inverse: bool) -> None:
    """`filter_axis0`, or its adjoint, along the first of three axes of the leading block, in place."""
    gathered = np.empty((slabs, width), x.dtype)
    filtered = np.empty_like(gathered)
    for i in range(rows):
        for s in range(slabs):
            for j in range(width):
                gathered[s, j] = x[s, i, j]
        if is_inverse:
            merge_axis0(gathered, filtered, slabs, width, low, high)
        else:
            filter_axis0(gathered, filtered, slabs, width, low, high)
        for s in range(slabs):
            for j in range(width):
                x[s, i, j] = filtered[s, j]


@_compiled
def analyse(x: Real, low: Real, high: Real, levels: int, slab_levels: int) -> None:
    """Periodized wavelet transform in place, approximation in the leading corner.

    The last two of three axes are transformed `levels` times, the first as well for the first `slab_levels` of them.
    """
    slabs, rows, width = x.shape
    scratch = np.empty((rows, width), x.dtype)
    even = np.empty(width // 2 + 4 * low.size, x.dtype)
    odd = np.empty_like(even)
    for level in range(levels):
        r, w = rows >> level, 2 * ((width // 2) >> level)
        depth = slabs >> min(level, slab_levels)
        for s in range(depth):
            plane = x[s]
            filter_axis0(plane, scratch, r, w, low, high)
            for i in range(r):
                source, target = scratch[i], plane[i]
                for j in range(w):
                    target[j] = source[j]
            filter_axis1(plane, r, w, low, high, even, odd)
        if level < slab_levels:
            filter_slabs(x, depth, r, w, low, high, False)


@_compiled
def synthesise(x: Real, low: Real, high: Real, levels: int, slab_levels: int) -> None:
    """The adjoint, and inverse, of `analyse`, in place."""
    slabs, rows, width = x.shape
    scratch = np.empty((rows, width), x.dtype)
    first = np.empty(width // 2 + 4 * low.size, x.dtype)
    second, even, odd = np.empty_like(first), np.empty_like(first), np.empty_like(first)
    for level in range(levels - 1, -1, -1):
        r, w = rows >> level, 2 * ((width // 2) >> level)
        depth = slabs >> min(level, slab_levels)
        if level < slab_levels:
            filter_slabs(x, depth, r, w, low, high, True)
        for s in range(depth):
            plane = x[s]
            merge_axis1(plane, r, w, low, high, first, second, even, odd)
            merge_axis0(plane, scratch, r, w, low, high)
            for i in range(r):
                source, target = scratch[i], plane[i]
                for j in range(w):
                    target[j] = source[j]


@_compiled
def shrink(x: Real, threshold: Any, corner: tuple[int, int, int]) -> float:
    """Soft-threshold complex coefficients in place, all but the approximation corner; return the sum of |x| left."""
    slabs, rows, width = x.shape
    total = 0.0
    for s in range(slabs):
        for i in range(rows):
            row = x[s, i]
            skip = corner[2] if s < corner[0] and i < corner[1] else 0
            part = threshold * 0
            for j in range(skip, width // 2):
                re, im = row[2 * j], row[2 * j + 1]
                size = np.sqrt(re * re + im * im)
                scale = 1 - threshold / max(size, threshold)
                row[2 * j] = re * scale
                row[2 * j + 1] = im * scale
                part += size * scale
            total += part
    return total


@_compiled
def subtract_divergence(v: Real, p: Real, scale: Any, weights: Real, out: Real) -> None:
    """out = v - scale D^H p; v may have a margin.

    p has shape (axes, slabs, rows, width), axes being 3, or 2 where there is one slab, and holds zeros across borders.
    """
    axes, slabs, rows, width = p.shape
    w0, w1, w2 = weights[0] * scale, weights[1] * scale, weights[2] * scale
    for s in range(v.shape[0]):
        for i in range(v.shape[1]):
            o, x = out[s, i], v[s, i]
            if s >= slabs or i >= rows:
                for j in range(v.shape[2]):
                    o[j] = x[j]
                continue
            for j in range(width, v.shape[2]):
                o[j] = x[j]
            p1, p2 = p[axes - 2, s, i], p[axes - 1, s, i]
            before1 = p[axes - 2, s, (i if i > 0 else rows) - 1]
            o[0] = x[0] + w1 * (p1[0] - before1[0]) + w2 * p2[0]
            o[1] = x[1] + w1 * (p1[1] - before1[1]) + w2 * p2[1]
            for j in range(2, width):
                o[j] = x[j] + w1 * (p1[j] - before1[j]) + w2 * (p2[j] - p2[j - 2])
            if slabs > 1:
                p0 = p[0, s, i]
                before0 = p[0, (s if s > 0 else slabs) - 1, i]
                for j in range(width):
                    o[j] += w0 * (p0[j] - before0[j])


@_compiled
def ascend_dual(
    p: Real, x: Real, step: Any, weights: Real, radius: Any, radius0: Any, is_joint: bool
) -> None:
    """p = projection of p + step D x, in place.

    The ball is |(p0, p1, p2)| <= radius at each pixel when `is_joint`, else |(p1, p2)| <= radius and |p0| <= radius0.
    """
    axes, slabs, rows, width = p.shape
    w0, w1, w2 = weights[0] * step, weights[1] * step, weights[2] * step
    for s in range(slabs):
        for i in range(rows):
            row = x[s, i]
            p0, p1, p2 = p[0, s, i], p[axes - 2, s, i], p[axes - 1, s, i]
            if i < rows - 1:
                below = x[s, i + 1]
                for j in range(width):
                    p1[j] += w1 * (below[j] - row[j])
            for j in range(width - 2):
                p2[j] += w2 * (row[j + 2] - row[j])
            if s < slabs - 1:
                after = x[s + 1, i]
                for j in range(width):
                    p0[j] += w0 * (after[j] - row[j])
            if is_joint and slabs > 1:
                for j in range(width // 2):
                    a, b = 2 * j, 2 * j + 1
                    square = (
                        p1[a] * p1[a]
                        + p1[b] * p1[b]
                        + p2[a] * p2[a]
                        + p2[b] * p2[b]
                        + p0[a] * p0[a]
                        + p0[b] * p0[b]
                    )
                    scale = radius / max(np.sqrt(square), radius)
                    p0[a] *= scale
                    p0[b] *= scale
                    p1[a] *= scale
                    p1[b] *= scale
                    p2[a] *= scale
                    p2[b] *= scale
                continue
            for j in range(width // 2):
                a, b = 2 * j, 2 * j + 1
                square = p1[a] * p1[a] + p1[b] * p1[b] + p2[a] * p2[a] + p2[b] * p2[b]
                scale = radius / max(np.sqrt(square), radius)
                p1[a] *= scale
                p1[b] *= scale
                p2[a] *= scale
                p2[b] *= scale
            if slabs > 1:
                for j in range(width // 2):
                    a, b = 2 * j, 2 * j + 1
                    scale = radius0 / max(np.sqrt(p0[a] * p0[a] + p0[b] * p0[b]), radius0)
                    p0[a] *= scale
                    p0[b] *= scale


@_compiled
def variation_sums(p: Real, x: Real, weights: Real, is_joint: bool) -> tuple[float, float, float]:
    """Sum |D x| (over the axes the ball of `ascend_dual` joins), sum |D_0 x| apart from it, and Re <p, D x>."""
    axes, slabs, rows, width = p.shape
    w0, w1, w2 = weights[0], weights[1], weights[2]
    total, total0, product = 0.0, 0.0, 0.0
    for s in range(slabs):
        for i in range(rows):
            row = x[s, i]
            below = x[s, min(i + 1, rows - 1)]
            after = x[min(s + 1, slabs - 1), i]
            p0, p1, p2 = p[0, s, i], p[axes - 2, s, i], p[axes - 1, s, i]
            part, part0, dot = w1 * 0, w1 * 0, w1 * 0
            for j in range(width // 2):
                a, b = 2 * j, 2 * j + 1
                c = min(a + 2, width - 2)
                ra, rb = w1 * (below[a] - row[a]), w1 * (below[b] - row[b])
                ca, cb = w2 * (row[c] - row[a]), w2 * (row[c + 1] - row[b])
                square = ra * ra + rb * rb + ca * ca + cb * cb
                dot += p1[a] * ra + p1[b] * rb + p2[a] * ca + p2[b] * cb
                if slabs > 1:
                    sa, sb = w0 * (after[a] - row[a]), w0 * (after[b] - row[b])
                    dot += p0[a] * sa + p0[b] * sb
                    if is_joint:
                        square += sa * sa + sb * sb
                    else:
                        part0 += np.sqrt(sa * sa + sb * sb)
                part += np.sqrt(square)
            total += part
            total0 += part0
            product += dot
    return total, total0, product


@_compiled
def extrapolated_step(
    x: Real, before: Real, hx: Real, hbefore: Real, b: Real, beta: Any, step: Any, out: Real
) -> None:
    """out = y - step g, with y = x + beta (x - before) and g = hx + beta (hx - hbefore) - b."""
    for i in range(x.size):
        y = x[i] + beta * (x[i] - before[i])
        g = hx[i] + beta * (hx[i] - hbefore[i]) - b[i]
        out[i] = y - step * g


@_compiled
def progress_sums(
    new: Real, hnew: Real, v: Real, b: Real, x: Real, before: Real, beta: Any, lipschitz: Any
) -> tuple[float, float, float, float]:
    """Sums that judge a step: |L (v - new) + hnew - b|^2, <new, hnew>, <new, b>, <y - new, new - x>."""
    stationarity, quadratic, linear, restart = 0.0, 0.0, 0.0, 0.0
    block = 4096
    for start in range(0, new.size, block):
        s, q, c, r = beta * 0, beta * 0, beta * 0, beta * 0
        for i in range(start, min(start + block, new.size)):
            e = lipschitz * (v[i] - new[i]) + hnew[i] - b[i]
            y = x[i] + beta * (x[i] - before[i])
            s += e * e
            q += new[i] * hnew[i]
            c += new[i] * b[i]
            r += (y - new[i]) * (new[i] - x[i])
        stationarity += s
        quadratic += q
        linear += c
        restart += r
    return stationarity, quadratic, linear, restart


@_compiled
def weigh(map_: Real, x: Real, out: Real) -> None:
    """out = map x, complex."""
    for j in range(x.size // 2):
        a, b = 2 * j, 2 * j + 1
        out[a] = map_[a] * x[a] - map_[b] * x[b]
        out[b] = map_[a] * x[b] + map_[b] * x[a]


@_compiled
def add_conjugate(map_: Real, x: Real, out: Real) -> None:
    """out += conj(map) x, complex."""
    for j in range(x.size // 2):
        a, b = 2 * j, 2 * j + 1
        out[a] += map_[a] * x[a] + map_[b] * x[b]
        out[b] += map_[a] * x[b] - map_[b] * x[a]
