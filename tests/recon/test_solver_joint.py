"""The solver on series of planes and on volumes: against a general convex solver."""

from __future__ import annotations

from importlib import import_module
from typing import Any, Literal

import numpy as np
import pytest

from recon.operators.base import dot_test
from recon.operators.differences import Differences
from recon.operators.encoding import Encoding
from recon.operators.wavelet import Wavelet
from recon.penalties import nuclear_norm, project_spectral
from recon.solver import solve
from recon.statement import Problem
from tests.recon.helpers import coil_maps, complex_normal
from tests.recon.operators import dense

Array = np.ndarray[Any, Any]
#: by name, since its own annotations leave out most of its functions.
cp: Any = import_module("cvxpy")


def joint_problem(depth: Literal["series", "volume"], **strengths: Any) -> Problem:
    """Return a noisy two-coil problem of four slabs of 8 x 8, with a block that changes from slab to slab."""
    rng = np.random.default_rng(5)
    picture = np.zeros((4, 8, 8), np.complex128)
    for slab, part in enumerate(picture):
        part[2:6, 2 : 4 + slab] = 5 * np.exp(0.5j)
    plane_maps = coil_maps(2, (8, 8))
    maps = plane_maps[:, np.newaxis] if depth == "series" else np.repeat(plane_maps[:, np.newaxis], 4, axis=1)
    if depth == "series":
        lines = rng.random((4, 8, 1)) < 0.5
        lines[:, 3:5] = True
    else:
        lines = rng.random((4, 8, 1)) < 0.6
        lines[2, 4] = True
    encoding = Encoding(maps.astype(np.complex128), np.broadcast_to(lines, picture.shape), depth)
    noisy = encoding.forward(picture) + complex_normal(rng, encoding.range_shape) * lines
    return Problem(encoding, noisy, "haar", **{"wavelet_strength": 0.0, "tv_strength": 0.0, **strengths})


def general_optimum(problem: Problem) -> float:
    """Return the optimum from CVXPY, with complex variables and dense matrices of the operators."""
    shape = problem.encoding.domain_shape
    is_volume = problem.encoding.depth == "volume"
    u = cp.Variable(int(np.prod(shape)), complex=True)
    objective = 0.5 * cp.sum_squares(dense(problem.encoding) @ u - problem.data.ravel())
    slabs, rows, columns = np.split(dense(Differences(shape, problem.weights)), 3)
    inside = [slabs @ u, rows @ u, columns @ u] if is_volume else [rows @ u, columns @ u]
    objective += problem.tv_strength * cp.sum(cp.norm(cp.vstack(inside), axis=0))
    objective += problem.temporal_strength * cp.sum(cp.abs(slabs @ u))
    if problem.wavelet_strength:
        wavelet = Wavelet(shape, problem.wavelet, along_slabs=is_volume)
        is_detail = np.ones(shape, np.bool_)
        counts = wavelet.approximation_shape
        is_detail[: counts[0], : counts[1], : counts[2]] = False
        objective += problem.wavelet_strength * cp.sum(cp.abs(dense(wavelet)[is_detail.ravel()] @ u))
    if problem.low_rank_strength:
        matrix = cp.reshape(u, (shape[0], shape[1] * shape[2]), order="C")
        objective += problem.low_rank_strength * cp.normNuc(matrix)
    task = cp.Problem(cp.Minimize(objective))
    task.solve(solver=cp.SCS, eps=1e-8, max_iters=100_000)
    assert task.status == cp.OPTIMAL
    return float(task.value)


@pytest.mark.filterwarnings("ignore:.*too many subexpressions:UserWarning")
@pytest.mark.parametrize(
    ("depth", "strengths"),
    [
        ("series", {"tv_strength": 0.3, "temporal_strength": 0.5}),
        ("series", {"wavelet_strength": 0.3, "temporal_strength": 0.4}),
        ("series", {"tv_strength": 0.2, "low_rank_strength": 1.5}),
        ("series", {"low_rank_strength": 2.0}),
        ("volume", {"tv_strength": 0.4, "wavelet_strength": 0.3}),
        ("volume", {"tv_strength": 0.6, "weights": (0.5, 1.0, 1.0)}),
    ],
)
def test_optimum_equals_that_of_a_general_convex_solver(
    depth: Literal["series", "volume"], strengths: dict[str, Any]
) -> None:
    """Source: CVXPY with a splitting cone solver; temporal TV, low rank and three-dimensional TV to 1e-5 relative."""
    problem = joint_problem(depth, **strengths)
    ours = solve(problem, tolerance=1e-8, max_iterations=30_000)
    assert ours.stop_reason == "optimal"
    assert ours.objective[-1] == pytest.approx(general_optimum(problem), rel=1e-5)


def test_series_without_ties_is_its_planes_one_by_one() -> None:
    """A series with no temporal term is the same as each frame solved alone."""
    problem = joint_problem("series", tv_strength=0.3, wavelet_strength=0.2)
    together = solve(problem, tolerance=1e-9, max_iterations=20_000).image
    for frame in range(4):
        lines = np.any(problem.data[0, frame] != 0, axis=-1, keepdims=True)
        encoding = Encoding(problem.encoding.maps[:, 0], np.broadcast_to(lines, (8, 8)))
        alone = Problem(encoding, problem.data[:, frame], "haar", 0.2, 0.3)
        image = solve(alone, tolerance=1e-9, max_iterations=20_000).image
        np.testing.assert_allclose(together[frame], image, atol=2e-4 * np.abs(image).max())


@pytest.mark.parametrize("depth", ["series", "volume"])
@pytest.mark.parametrize("has_complete_readouts", [True, False])
def test_joint_encodings_have_their_adjoint_and_normal_operator(
    depth: Literal["series", "volume"], has_complete_readouts: bool
) -> None:
    """Dot test; and E^H E as `forward` then `adjoint`, plus the outside."""
    rng = np.random.default_rng(3)
    maps = complex_normal(rng, (3, 1 if depth == "series" else 5, 7, 6))
    maps[..., 0] = 0
    mask = rng.random((5, 7, 1 if has_complete_readouts else 6)) < 0.5
    encoding = Encoding(maps, np.broadcast_to(mask, (5, 7, 6)), depth)
    assert dot_test(encoding, rng, np.complex128) < 1e-12
    x = complex_normal(rng, (5, 7, 6))
    outside = np.zeros_like(x)
    outside[..., 0] = x[..., 0]
    np.testing.assert_allclose(
        encoding.normal(x), encoding.adjoint(encoding.forward(x)) + outside, atol=1e-12
    )


@pytest.mark.parametrize("shape", [(16, 16, 16), (5, 24, 18), (1, 16, 16)])
def test_volume_wavelet_is_orthogonal(shape: tuple[int, int, int]) -> None:
    """W^H W = I for volumes, slabs transformed or not."""
    rng = np.random.default_rng(1)
    for along_slabs in (True, False):
        wavelet = Wavelet(shape, "db2", along_slabs=along_slabs)
        x = complex_normal(rng, wavelet.domain_shape)
        coefficients = wavelet.forward(x)
        np.testing.assert_allclose(wavelet.adjoint(coefficients), x, atol=1e-12)
        assert np.linalg.norm(coefficients) == pytest.approx(np.linalg.norm(x), rel=1e-12)
        assert dot_test(wavelet, rng, np.complex128) < 1e-12


def test_spectral_projection_clips_singular_values() -> None:
    """Against numpy's singular value decomposition."""
    rng = np.random.default_rng(8)
    matrix = complex_normal(rng, (6, 4, 5))
    left, values, right = np.linalg.svd(matrix.reshape(6, 20), full_matrices=False)
    expected = (left * np.minimum(values, 2.0)) @ right
    np.testing.assert_allclose(project_spectral(matrix, 2.0).reshape(6, 20), expected, atol=1e-10)
    assert nuclear_norm(matrix) == pytest.approx(values.sum(), rel=1e-10)
