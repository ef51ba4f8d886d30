"""The contract of every linear operator, and the test that proves an adjoint.

To add an operator: subclass `LinearOperator`, set the two shapes, write `forward` and `adjoint`, add one row to the
registry in `tests/recon/operators.py`; the dot test and the dense-matrix test then run over it.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import Any

import numpy as np
from numpy.typing import NDArray


def inner(a: NDArray[Any], b: NDArray[Any]) -> complex:
    """Inner product <a, b> = sum conj(a) b, accumulated in double precision whatever the arrays hold.

    Row sums in double precision keep the error near that of the inputs without a double-precision copy of them.
    """
    first, second = a.reshape(-1), b.reshape(-1)
    step = 4096
    total = 0.0 + 0.0j
    for start in range(0, first.size, step):
        total += complex(np.vdot(first[start : start + step], second[start : start + step]))
    return total


def norm(a: NDArray[Any]) -> float:
    """Euclidean norm, accumulated as `inner` does."""
    return float(np.sqrt(max(inner(a, a).real, 0.0)))


class LinearOperator(ABC):
    """A linear map A with its adjoint A^H: <A x, y> = <x, A^H y>.

    Attributes
    ----------
    domain_shape, range_shape : tuple of int
        Shapes of x and of A x.
    """

    domain_shape: tuple[int, ...]
    range_shape: tuple[int, ...]

    @abstractmethod
    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """Return A x; complex in, complex out, of the same precision."""

    @abstractmethod
    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """Return A^H y."""


def dot_test(operator: LinearOperator, rng: np.random.Generator, dtype: Any = np.complex64) -> float:
    """Relative mismatch |<A x, y> - <x, A^H y>| / (||A x|| ||y||) for random complex x and y.

    Parameters
    ----------
    operator : LinearOperator
    rng : numpy.random.Generator
    dtype : complex dtype
        Precision of the test vectors.

    Returns
    -------
    float
        Of the order of the precision when the adjoint is right, of order one when it is wrong.
    """

    def draw(shape: tuple[int, ...]) -> NDArray[Any]:
        return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)).astype(dtype)

    x, y = draw(operator.domain_shape), draw(operator.range_shape)
    image, back = operator.forward(x), operator.adjoint(y)
    scale = norm(image) * norm(y) + np.finfo(np.float64).tiny
    return abs(inner(image, y) - inner(x, back)) / scale
