"""The operator contract, over every row of the registry."""

from __future__ import annotations

import inspect
import pkgutil
from importlib import import_module
from typing import Any

import numpy as np
import pytest

import recon.operators
from recon.operators.base import LinearOperator, dot_test, inner, norm
from recon.operators.differences import Differences
from recon.operators.encoding import Encoding
from recon.operators.wavelet import Wavelet
from tests.recon.helpers import complex_normal, line_mask, numpy_transform
from tests.recon.operators import REGISTRY, dense

EVERY = pytest.mark.parametrize("name", REGISTRY)


@EVERY
@pytest.mark.parametrize(("dtype", "limit"), [(np.complex64, 2e-6), (np.complex128, 1e-14)])
def test_adjoint_passes_the_dot_test(name: str, dtype: type, limit: float) -> None:
    """Source: linear algebra, <A x, y> = <x, A^H y>."""
    rng = np.random.default_rng(7)
    operator = REGISTRY[name](dtype)
    assert max(dot_test(operator, rng, dtype) for _ in range(5)) < limit


@EVERY
def test_adjoint_is_the_conjugate_transpose_of_the_dense_matrix(name: str) -> None:
    """Source: linear algebra; every entry, not a random projection."""
    operator = REGISTRY[name](np.complex128)
    matrix = dense(operator)
    y = complex_normal(np.random.default_rng(3), operator.range_shape)
    np.testing.assert_allclose(operator.adjoint(y).ravel(), matrix.conj().T @ y.ravel(), atol=1e-12)


@EVERY
@pytest.mark.parametrize("dtype", [np.complex64, np.complex128])
def test_shapes_and_precision_are_kept(name: str, dtype: Any) -> None:
    operator = REGISTRY[name](dtype)
    rng = np.random.default_rng(1)
    x = complex_normal(rng, operator.domain_shape, dtype)
    y = complex_normal(rng, operator.range_shape, dtype)
    before = x.copy(), y.copy()
    forward, back = operator.forward(x), operator.adjoint(y)
    assert forward.shape == operator.range_shape
    assert back.shape == operator.domain_shape
    assert forward.dtype == back.dtype == dtype
    np.testing.assert_array_equal(x, before[0])
    np.testing.assert_array_equal(y, before[1])


@EVERY
def test_real_input_is_the_real_case_of_complex_input(name: str) -> None:
    operator = REGISTRY[name](np.complex128)
    x = np.random.default_rng(2).standard_normal(operator.domain_shape)
    np.testing.assert_allclose(
        operator.forward(x.astype(np.complex128)).ravel(), dense(operator) @ x.ravel(), atol=1e-12
    )


def test_every_operator_class_has_a_row() -> None:
    found = set()
    for module in pkgutil.iter_modules(recon.operators.__path__):
        for _, kind in inspect.getmembers(
            import_module(f"recon.operators.{module.name}"), lambda k: inspect.isclass(k)
        ):
            if issubclass(kind, LinearOperator) and not inspect.isabstract(kind):
                found.add(kind)
    assert found == {type(make(np.complex128)) for make in REGISTRY.values()}


def test_norm_bounds_against_the_singular_values() -> None:
    """Source: numpy.linalg.svd of the dense matrix."""
    for name, make in REGISTRY.items():
        operator = make(np.complex128)
        largest = np.linalg.svd(dense(operator), compute_uv=False)[0]
        if isinstance(operator, Encoding):
            bound = operator.squared_norm_bound()
            assert largest**2 <= bound * (1 + 1e-12), name
            assert bound < 3 * largest**2, name  # loose bounds would make the solver slow
        elif isinstance(operator, Differences):
            assert largest**2 < operator.bound, name
        else:
            assert largest == pytest.approx(1, abs=1e-10), name


def test_norm_bound_of_differences_is_tight() -> None:
    """Source: Chambolle 2004: ||D||^2 tends to 8 on large grids."""
    assert (
        np.linalg.svd(dense(Differences((20, 20))), compute_uv=False)[0] ** 2
        > 0.98 * Differences((20, 20)).bound
    )


@pytest.mark.parametrize("name", [name for name in REGISTRY if name.startswith("encoding")])
@pytest.mark.parametrize("dtype", [np.complex64, np.complex128])
def test_normal_operator_is_adjoint_after_forward(name: str, dtype: Any) -> None:
    operator = REGISTRY[name](dtype)
    assert isinstance(operator, Encoding)
    x = complex_normal(np.random.default_rng(4), operator.domain_shape, dtype)
    limit = 1e-6 if dtype == np.complex64 else 1e-13
    composed = operator.adjoint(operator.forward(x))
    np.testing.assert_allclose(operator.normal(x), composed, atol=limit * np.abs(composed).max() * 10)


def test_encoding_of_lines_equals_encoding_of_points() -> None:
    """The transform along fully sampled columns may leave the iteration: by Parseval nothing else changes."""
    lines = REGISTRY["encoding lines odd"](np.complex128)
    assert isinstance(lines, Encoding)
    assert lines.axes == (-2,)
    x = complex_normal(np.random.default_rng(5), lines.domain_shape)
    expected = numpy_transform(lines.maps * x) * line_mask(15, 11, every=3, calibration=4)
    np.testing.assert_allclose(lines.to_kspace(lines.forward(x)), expected, atol=1e-12)
    np.testing.assert_allclose(lines.to_range(expected), lines.forward(x), atol=1e-12)


def test_wrong_adjoint_fails_the_dot_test() -> None:
    class Wrong(Differences):
        def adjoint(self, y: np.ndarray) -> np.ndarray:
            return -super().adjoint(y)

    assert dot_test(Wrong((8, 8)), np.random.default_rng(0)) > 0.01  # right ones: 1e-6


def test_inner_product_is_accumulated_in_double_precision() -> None:
    a = np.full(4_000_000, 0.1 + 0.1j, np.complex64)
    exact = 4_000_000 * 2 * float(np.float32(0.1)) ** 2
    assert inner(a, a).real == pytest.approx(exact, rel=1e-6)
    assert norm(a) == pytest.approx(np.sqrt(exact), rel=1e-6)


@pytest.mark.parametrize("name", [name for name in REGISTRY if name.startswith("wavelet")])
def test_wavelet_is_unitary(name: str) -> None:
    """Source: Daubechies 1992: W^H W = W W^H = I, on odd sizes too."""
    operator = REGISTRY[name](np.complex128)
    assert isinstance(operator, Wavelet)
    matrix = dense(operator)
    identity = np.eye(matrix.shape[0])
    np.testing.assert_allclose(matrix.conj().T @ matrix, identity, atol=1e-10)
    np.testing.assert_allclose(matrix @ matrix.conj().T, identity, atol=1e-10)
