"""How the inner loops are compiled, and how they see images."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

import numba
import numpy as np
from numpy.typing import NDArray

#: a float32 view of complex64 numbers: real and imaginary parts interleaved along the last axis.
Real = NDArray[Any]
Kernel = TypeVar("Kernel", bound=Callable[..., Any])


def compiled(function: Kernel) -> Kernel:
    """Compile at first use; machine code is kept beside the source or in the user's cache folder."""
    options: dict[str, Any] = {"fastmath": True, "nogil": True, "boundscheck": False, "error_model": "numpy"}
    try:
        made: Kernel = numba.njit(cache=True, **options)(function)
    except RuntimeError:  # neither folder can be written: compile anew in each process
        made = numba.njit(**options)(function)
    return made


def as_slabs(x: NDArray[Any]) -> Real:
    """A plane or a volume as real numbers with three axes; nothing is copied."""
    real = x.view(x.real.dtype)
    return real if real.ndim == 3 else real[np.newaxis]
