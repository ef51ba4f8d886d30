"""The optimum of any small problem by a general convex solver, from dense matrices of the operators."""

from __future__ import annotations

from importlib import import_module
from typing import Any

import numpy as np

from recon.operators.differences import Differences
from recon.operators.wavelet import Wavelet
from recon.shifts import shift_set
from recon.statement import Problem
from tests.recon.operators import dense

Array = np.ndarray[Any, Any]
#: by name, since its own annotations leave out most of its functions.
cp: Any = import_module("cvxpy")


def constrained_optimum(problem: Problem) -> float:
    """Return the optimum with cycle spinning and constraints; the padded image is the variable."""
    shape, encoding = problem.encoding.domain_shape, problem.encoding
    is_volume = encoding.depth == "volume"
    wavelet = Wavelet(shape, problem.wavelet, along_slabs=is_volume)
    padded = wavelet.domain_shape if problem.wavelet_strength else shape
    size = int(np.prod(padded))
    window = np.zeros(padded, np.bool_)
    window[tuple(slice(0, n) for n in shape)] = True
    inside = np.flatnonzero(window.ravel())
    is_real = problem.constraint != "none"
    parts = [cp.Variable(size)] if is_real else [cp.Variable(size), cp.Variable(size)]
    kept = [part[inside] for part in parts]
    E, data = dense(encoding), problem.data.ravel()
    sampled = np.abs(E).sum(axis=1) > 0
    E, data = E[sampled], data[sampled]
    columns = [np.concatenate([E.real, E.imag]), np.concatenate([-E.imag, E.real])]
    fit = sum(block @ part for block, part in zip(columns, kept, strict=False))
    objective = 0.5 * cp.sum_squares(fit - np.concatenate([data.real, data.imag]))
    differences = [
        d.real for d in np.split(dense(Differences(shape, problem.weights[-len(shape) :])), len(shape))
    ]
    tied = differences if is_volume or len(shape) == 2 else differences[1:]
    stack = [d @ part for d in tied for part in kept]
    objective += problem.tv_strength * cp.sum(cp.norm(cp.vstack(stack), axis=0))
    if problem.wavelet_strength:
        W = dense(wavelet).real
        is_detail = np.ones(padded, np.bool_)
        counts = list(wavelet.approximation_shape)
        if len(shape) == 3 and not is_volume:
            counts[0] = padded[0]
        is_detail[tuple(slice(0, n) for n in counts)] = False
        shifts = shift_set(wavelet, problem.wavelet_shifts)
        for shift in shifts:
            order = np.roll(np.arange(size).reshape(padded), shift, tuple(range(len(padded)))).ravel()
            details = [W[is_detail.ravel()] @ part[order] for part in parts]
            lengths = cp.norm(cp.vstack(details), axis=0) if len(details) > 1 else cp.abs(details[0])
            objective += problem.wavelet_strength / len(shifts) * cp.sum(lengths)
    limits = [kept[0] >= 0] if problem.constraint == "nonnegative" else []
    task = cp.Problem(cp.Minimize(objective), limits)
    task.solve(solver=cp.CLARABEL)
    assert task.status == cp.OPTIMAL
    return float(task.value)
