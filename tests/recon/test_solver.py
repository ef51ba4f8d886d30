"""The solver against a general convex solver, an independent TV program and closed forms."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import cvxpy
import numpy as np
import pytest
import skimage.restoration

from recon.operators.differences import Differences
from recon.operators.encoding import Encoding
from recon.operators.wavelet import Wavelet
from recon.penalties import TotalVariation
from recon.phantom import Ellipse, rasterise
from recon.solver import solve
from recon.statement import Problem, Solution
from tests.recon.helpers import (
    Array,
    coil_maps,
    complex_normal,
    line_mask,
    nrmse,
    numpy_transform,
    radial_mask,
)
from tests.recon.operators import dense

# Neither program is typed throughout.
cp: Any = cvxpy
denoise_tv_chambolle: Any = skimage.restoration.denoise_tv_chambolle


def small_problem(
    shape: tuple[int, int] = (16, 16),
    *,
    coils: int = 3,
    wavelet: str = "haar",
    strengths: tuple[float, float] = (0.3, 0.2),
    mask_kind: str = "lines",
    dtype: Any = np.complex128,
) -> Problem:
    """Return a noisy several-coil problem around a square with a phase."""
    rng = np.random.default_rng(11)
    picture = np.zeros(shape, np.complex128)
    picture[4:11, 5:12] = 6 * np.exp(0.7j)
    picture[6:8, 6:9] = 3
    lines = line_mask(*shape, every=3, calibration=4)
    mask = lines if mask_kind == "lines" else radial_mask(max(shape), 6)[: shape[0], : shape[1]]
    maps = coil_maps(coils, shape)
    kspace = numpy_transform(maps * picture) + complex_normal(rng, (coils, *shape))
    encoding = Encoding(maps.astype(dtype), mask)
    return Problem(encoding, encoding.to_range((kspace * mask).astype(dtype)), wavelet, *strengths)


def denoising(picture: Array, tv_strength: float, dtype: Any = np.complex128) -> Problem:
    """Return the ROF problem 1/2 ||u - f||^2 + lambda TV(u): one coil, every sample, S = 1."""
    mask = np.ones(picture.shape, np.bool_)
    encoding = Encoding(np.ones((1, *picture.shape), dtype), mask)
    return Problem(
        encoding, encoding.to_range(numpy_transform(picture).astype(dtype)[None]), "haar", 0.0, tv_strength
    )


def general_optimum(problem: Problem) -> tuple[float, Array]:
    """Return optimum and minimiser from CVXPY, from dense matrices of the operators."""
    shape = problem.encoding.domain_shape
    E = dense(problem.encoding)
    kept = np.abs(E).sum(axis=1) > 0
    wavelet = Wavelet((shape[0], shape[1]), problem.wavelet)
    rows, columns = wavelet.domain_shape
    W, D = dense(wavelet), dense(Differences((shape[0], shape[1])))
    is_detail = np.ones(wavelet.range_shape, np.bool_)
    is_detail[tuple(slice(0, n) for n in wavelet.approximation_shape)] = False
    window = np.zeros((rows, columns), np.bool_)
    window[: shape[0], : shape[1]] = True
    # Real and imaginary parts as variables of their own, magnitudes as second-order cones.
    inside, size = np.flatnonzero(window.ravel()), rows * columns
    real, imaginary = cp.Variable(size), cp.Variable(size)
    u = cp.hstack([real[inside], imaginary[inside]])
    E, data = E[kept], problem.data.ravel()[kept]
    residual = np.block([[E.real, -E.imag], [E.imag, E.real]]) @ u - np.concatenate([data.real, data.imag])
    w = W.real[is_detail.ravel()]
    d = [np.kron(np.eye(2), part.real) for part in np.split(D, 2)]
    n = inside.size
    details, lengths = cp.Variable(w.shape[0]), cp.Variable(n)
    steps = [part @ u for part in d]
    task = cp.Problem(
        cp.Minimize(
            0.5 * cp.sum_squares(residual)
            + problem.wavelet_strength * cp.sum(details)
            + problem.tv_strength * cp.sum(lengths)
        ),
        [
            cp.SOC(details, cp.vstack([w @ real, w @ imaginary])),
            cp.SOC(lengths, cp.vstack([steps[0][:n], steps[0][n:], steps[1][:n], steps[1][n:]])),
        ],
    )
    task.solve(solver=cp.CLARABEL)
    assert task.status == cp.OPTIMAL
    found = np.asarray(real.value) + 1j * np.asarray(imaginary.value)
    return float(task.value), found.reshape(rows, columns)[: shape[0], : shape[1]]


@pytest.mark.parametrize(
    ("wavelet", "strengths", "mask_kind", "shape"),
    [
        ("haar", (0.3, 0.2), "lines", (16, 16)),
        ("db4", (0.4, 0.4), "lines", (16, 16)),
        ("db2", (0.5, 0.0), "points", (16, 16)),
        ("haar", (0.0, 0.5), "points", (16, 16)),
        ("db2", (0.3, 0.3), "lines", (13, 15)),
    ],
)
def test_optimum_equals_that_of_a_general_convex_solver(
    wavelet: str, strengths: tuple[float, float], mask_kind: str, shape: tuple[int, int]
) -> None:
    """Source: CVXPY with an interior-point method; wavelet, TV and several coils to 1e-5 relative."""
    problem = small_problem(shape, wavelet=wavelet, strengths=strengths, mask_kind=mask_kind)
    optimum, minimiser = general_optimum(problem)
    ours = solve(problem, tolerance=1e-7, max_iterations=20_000)
    assert ours.stop_reason == "optimal"
    assert ours.objective[-1] == pytest.approx(optimum, rel=1e-5)
    assert nrmse(ours.image, minimiser) < 1e-3


def test_reported_objective_is_the_objective_of_the_image() -> None:
    """Source: evaluated here term by term with dense matrices."""
    problem = small_problem(wavelet="db2")
    ours = solve(problem, tolerance=1e-4, max_iterations=400)
    residual = problem.encoding.forward(ours.image) - problem.data
    wavelet = Wavelet((16, 16), "db2")
    coefficients = wavelet.forward(ours.image)
    coefficients[tuple(slice(0, n) for n in wavelet.approximation_shape)] = 0
    gradient = Differences((16, 16)).forward(ours.image)
    value = (
        0.5 * np.linalg.norm(residual) ** 2
        + 0.3 * np.abs(coefficients).sum()
        + 0.2 * np.sqrt((np.abs(gradient) ** 2).sum(axis=0)).sum()
    )
    assert ours.objective[-1] == pytest.approx(value, rel=1e-9)


def test_single_precision_reaches_the_same_image() -> None:
    double = solve(small_problem(), tolerance=1e-6, max_iterations=5000)
    single = solve(small_problem(dtype=np.complex64), tolerance=1e-4, max_iterations=5000)
    assert single.image.dtype == np.complex64
    assert single.stop_reason == "optimal"
    assert nrmse(single.image, double.image) < 3e-3


def test_tv_denoising_is_no_worse_than_an_independent_program_at_convergence() -> None:
    """Source: scikit-image, Chambolle's dual method, run to convergence on the same objective."""
    rng = np.random.default_rng(0)
    picture = rasterise(
        [Ellipse(4, (0.1, 0), (0.5, 0.3), 30), Ellipse(-2, (0.2, 0.1), (0.1, 0.2))], (40, 48)
    ).real
    noisy = picture + 0.5 * rng.standard_normal(picture.shape)
    strength = 0.6
    theirs = denoise_tv_chambolle(noisy, weight=strength, eps=1e-12, max_num_iter=5000)
    ours = solve(denoising(noisy, strength), tolerance=1e-6, max_iterations=3000)
    tv = TotalVariation(Differences((40, 48)), strength)

    def objective(u: Array) -> float:
        return 0.5 * float(np.linalg.norm(u - noisy)) ** 2 + tv.value(u.astype(np.complex128))

    assert objective(ours.image) <= objective(theirs) * (1 + 1e-6)
    assert np.abs(ours.image - theirs).max() < 5e-3
    assert np.abs(ours.image.imag).max() < 1e-9


@pytest.mark.parametrize("radius", [12, 20])
def test_disc_loses_contrast_as_the_closed_form_says(radius: int) -> None:
    """Source: Strong & Chan 2003: contrast falls by 2 lambda / r + 2 pi r lambda / (N^2 - pi r^2).

    Forward differences see a slightly longer perimeter than the circle's, hence the tolerance of 6 %.
    """
    n, strength = 64, 0.5
    disc = rasterise([Ellipse(5.0, (0, 0), (2 * radius / n, 2 * radius / n))], (n, n), supersampling=8).real
    u = solve(denoising(disc, strength), tolerance=1e-4, max_iterations=2000).image.real
    inside = rasterise([Ellipse(1, (0, 0), (2 * (radius - 3) / n,) * 2)], (n, n)).real > 0
    outside = rasterise([Ellipse(1, (0, 0), (2 * (radius + 3) / n,) * 2)], (n, n)).real == 0
    lost = 5.0 - (u[inside].mean() - u[outside].mean())
    expected = 2 * strength / radius + 2 * np.pi * radius * strength / (n**2 - np.pi * radius**2)
    assert lost == pytest.approx(expected, rel=0.06)


def test_step_edge_keeps_its_position() -> None:
    """Source: Strong & Chan 2003: TV moves the levels together and leaves the edge where it is."""
    step = np.zeros((32, 40))
    step[:, 17:] = 3.0
    u = solve(denoising(step, 0.7), tolerance=1e-8, max_iterations=5000).image.real
    np.testing.assert_allclose(u[:, :17], 0.7 / 17, atol=1e-5)
    np.testing.assert_allclose(u[:, 17:], 3 - 0.7 / 23, atol=1e-5)


def test_wavelet_only_denoising_is_one_soft_threshold() -> None:
    """Source: closed form: with E = I the minimiser is the thresholded transform."""
    rng = np.random.default_rng(3)
    picture = complex_normal(rng, (32, 32)) * 2
    encoding = Encoding(np.ones((1, 32, 32), np.complex128), np.ones((32, 32), np.bool_))
    problem = Problem(encoding, encoding.to_range(numpy_transform(picture)[None]), "db2", 0.8, 0.0)
    wavelet = Wavelet((32, 32), "db2")
    coefficients = wavelet.forward(picture)
    corner = tuple(slice(0, n) for n in wavelet.approximation_shape)
    shrunk = coefficients * np.maximum(1 - 0.8 / np.abs(coefficients), 0)
    shrunk[corner] = coefficients[corner]
    ours = solve(problem, tolerance=1e-10, max_iterations=200)
    np.testing.assert_allclose(ours.image, wavelet.adjoint(shrunk), atol=1e-8)


@lru_cache
def _overfit_problem() -> tuple[Array, Array, Array, Array]:
    """Return truth, maps, mask, noisy data of a case with noise of unit variance per sample."""
    rng = np.random.default_rng(5)
    shape = (64, 64)
    truth = rasterise([Ellipse(8, (0, 0), (0.7, 0.8)), Ellipse(-4, (0.2, 0.1), (0.2, 0.3), 20)], shape)
    maps = coil_maps(4, shape)
    mask = line_mask(*shape, every=3, calibration=8)
    data = (numpy_transform(maps * truth) + complex_normal(rng, (4, *shape))) * mask
    return truth, maps, mask, data


def test_unregularised_least_squares_over_fits_and_the_regularised_solution_does_not() -> None:
    """Source: common practice, no source: semi-convergence of iterative least squares on noisy data.

    Without penalties the residual falls below the noise floor while the image error rises again; with them
    the error keeps falling to its plateau.
    """
    truth, maps, mask, data = _overfit_problem()
    encoding = Encoding(maps, mask)
    samples = 4 * int(mask.sum())

    def run(wavelet: float, tv: float) -> tuple[list[float], list[float]]:
        errors, residuals = [], []
        problem = Problem(encoding, encoding.to_range(data), "db4", wavelet, tv)
        for iterations in (2, 5, 10, 20, 50, 150, 300):
            found = solve(problem, tolerance=1e-12, max_iterations=iterations)
            errors.append(nrmse(found.image, truth))
            residuals.append(
                float(np.linalg.norm(encoding.forward(found.image) - problem.data) ** 2) / samples
            )
        return errors, residuals

    errors, residuals = run(0.0, 0.0)
    assert residuals[-1] < 0.8  # the noise alone has 1
    assert errors[-1] > 1.5 * min(errors)
    assert 0 < int(np.argmin(errors)) < len(errors) - 1
    regularised, _ = run(0.15, 0.15)
    assert regularised[-1] < 1.01 * min(regularised)
    assert regularised[-1] < 0.8 * min(errors)


def test_warm_start_at_the_solution_stops_at_once() -> None:
    problem = small_problem()
    cold = solve(problem, tolerance=1e-5, max_iterations=5000)
    warm = solve(problem, tolerance=1e-4, max_iterations=5000, start=cold)
    assert warm.iterations < cold.iterations / 4
    assert nrmse(warm.image, cold.image) < 1e-3


def test_same_problem_gives_the_same_bytes() -> None:
    first, second = (
        solve(small_problem(dtype=np.complex64), tolerance=1e-3, max_iterations=100) for _ in range(2)
    )
    assert first.image.tobytes() == second.image.tobytes()


def test_objective_falls_and_iteration_limit_is_a_value() -> None:
    found = solve(small_problem(), tolerance=1e-9, max_iterations=30)
    assert found.stop_reason == "iteration-limit"
    assert found.iterations == len(found.objective) == 30
    assert found.objective[-1] < found.objective[0]
    assert found.optimality > 1e-9


def test_callback_sees_every_iteration_and_may_cancel() -> None:
    seen: list[tuple[int, float]] = []
    found = solve(
        small_problem(), tolerance=1e-3, max_iterations=100, callback=lambda i, r: seen.append((i, r))
    )
    assert [i for i, _ in seen] == list(range(1, found.iterations + 1))
    assert seen[-1][1] == found.optimality < 1e-3

    def cancel(iteration: int, optimality: float) -> None:
        if iteration == 3:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        solve(small_problem(), tolerance=1e-9, max_iterations=100, callback=cancel)


def test_empty_data_are_no_problem() -> None:
    problem = small_problem()
    empty: Solution = solve(
        Problem(problem.encoding, np.zeros_like(problem.data), "haar", 0.3, 0.3),
        tolerance=1e-3,
        max_iterations=10,
    )
    assert empty.stop_reason == "nothing-to-solve"
    assert not empty.image.any()


def test_solution_does_not_depend_on_the_scale_of_data_and_strengths() -> None:
    """The objective is homogeneous: u for (a y, a lambda) is a u for (y, lambda)."""
    problem = small_problem()
    larger = Problem(problem.encoding, 1000 * problem.data, "haar", 300.0, 200.0)
    once = solve(problem, tolerance=1e-6, max_iterations=5000)
    scaled = solve(larger, tolerance=1e-6, max_iterations=5000)
    assert nrmse(scaled.image, 1000 * once.image) < 1e-6
