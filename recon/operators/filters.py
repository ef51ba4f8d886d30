"""Compiled loops of the periodized wavelet transform (see `recon.kernels` for the form of their arrays)."""

from __future__ import annotations

import numpy as np

from recon.compiled import Real, compiled


@compiled
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


@compiled
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


@compiled
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


@compiled
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


@compiled
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


@compiled
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


@compiled
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
