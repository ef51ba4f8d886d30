"""Compiled inner loops of the solver: each does in one pass over memory what NumPy would do in five to ten.

All arrays are float32 views of complex64 ones (real and imaginary parts interleaved along the last axis), three axes
deep; a plane is a volume of one slab. The plain NumPy forms in `recon.operators` and `recon.penalties` say the same in
a readable way and are what the tests compare these with. The global interpreter lock is released, so planes can be
solved in threads. Those of the wavelet transform are in `recon.operators.filters`.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from recon.compiled import Real, compiled


@compiled
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


@compiled
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


@compiled
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


@compiled
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


@compiled
def extrapolated_step(
    x: Real, before: Real, hx: Real, hbefore: Real, b: Real, beta: Any, step: Any, out: Real
) -> None:
    """out = y - step g, with y = x + beta (x - before) and g = hx + beta (hx - hbefore) - b."""
    for i in range(x.size):
        y = x[i] + beta * (x[i] - before[i])
        g = hx[i] + beta * (hx[i] - hbefore[i]) - b[i]
        out[i] = y - step * g


@compiled
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


@compiled
def weigh(map_: Real, x: Real, out: Real) -> None:
    """out = map x, complex."""
    for j in range(x.size // 2):
        a, b = 2 * j, 2 * j + 1
        out[a] = map_[a] * x[a] - map_[b] * x[b]
        out[b] = map_[a] * x[b] + map_[b] * x[a]


@compiled
def add_conjugate(map_: Real, x: Real, out: Real) -> None:
    """out += conj(map) x, complex."""
    for j in range(x.size // 2):
        a, b = 2 * j, 2 * j + 1
        out[a] += map_[a] * x[a] + map_[b] * x[b]
        out[b] += map_[a] * x[b] - map_[b] * x[a]


@compiled
def scale(x: Real, factor: Real) -> None:
    """x *= factor, complex by real; x is (slabs, rows, 2 columns), factor (slabs, rows, columns or 1)."""
    slabs, rows, width = x.shape
    for s in range(slabs):
        for i in range(rows):
            row, weights = x[s, i], factor[s, i]
            if weights.size > 1:
                for j in range(width // 2):
                    row[2 * j] *= weights[j]
                    row[2 * j + 1] *= weights[j]
            elif weights[0] == 0:  # most rows of an accelerated scan
                row[:] = 0
            else:
                for j in range(width):
                    row[j] *= weights[0]


@compiled
def subtract(x: Real, factor: Any, y: Real) -> None:
    """x -= factor y, in place."""
    for i in range(x.size):
        x[i] -= factor * y[i]


@compiled
def ascend_coefficients(q: Real, c: Real, step: Any, radius: Any, corner: tuple[int, int, int]) -> None:
    """q = projection of q + step c onto |q| <= radius, in place; zero in the approximation corner."""
    slabs, rows, width = q.shape
    for s in range(slabs):
        for i in range(rows):
            a, b = q[s, i], c[s, i]
            skip = corner[2] if s < corner[0] and i < corner[1] else 0
            a[: 2 * skip] = 0
            for j in range(skip, width // 2):
                re, im = a[2 * j] + step * b[2 * j], a[2 * j + 1] + step * b[2 * j + 1]
                scale = radius / max(np.sqrt(re * re + im * im), radius)
                a[2 * j] = re * scale
                a[2 * j + 1] = im * scale


@compiled
def coefficient_sums(q: Real, c: Real, corner: tuple[int, int, int]) -> tuple[float, float]:
    """Sum of |c| outside the approximation corner, and Re <q, c>."""
    slabs, rows, width = q.shape
    size, product = 0.0, 0.0
    for s in range(slabs):
        for i in range(rows):
            a, b = q[s, i], c[s, i]
            skip = corner[2] if s < corner[0] and i < corner[1] else 0
            part, dot = b[0] * 0, b[0] * 0
            for j in range(skip, width // 2):
                part += np.sqrt(b[2 * j] * b[2 * j] + b[2 * j + 1] * b[2 * j + 1])
                dot += a[2 * j] * b[2 * j] + a[2 * j + 1] * b[2 * j + 1]
            size += part
            product += dot
    return size, product
