"""The registry of operators: the contract tests run over every row."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from recon.operators.base import LinearOperator
from recon.operators.differences import Differences
from recon.operators.encoding import Encoding
from recon.operators.folded import FoldedEncoding
from recon.operators.fourier import Fourier
from recon.operators.wavelet import Wavelet
from tests.recon.helpers import coil_maps, line_mask, radial_mask


def _encoding(coils: int, shape: tuple[int, int], kind: str, dtype: type) -> Encoding:
    if kind == "lines":
        mask = line_mask(*shape, every=3, calibration=4)
    else:
        mask = radial_mask(max(shape), 7)[: shape[0], : shape[1]]
    return Encoding(coil_maps(coils, shape, dtype), mask)


def _weighted(shape: tuple[int, int], *, per_line: bool, dtype: type) -> Encoding:
    """Positions measured unequally often, some not at all."""
    counts = np.random.default_rng(5).integers(0, 5, (shape[0], 1) if per_line else shape)
    mask = np.broadcast_to(counts > 0, shape)
    weights = np.broadcast_to(np.sqrt(counts / counts[counts > 0].mean()), shape)
    return Encoding(coil_maps(3, shape, dtype), mask, weights=weights)


def _folded(shape: tuple[int, int], mask: NDArray[np.bool_], dtype: type) -> FoldedEncoding:
    """Two sets of maps, both without a gap."""
    first = coil_maps(3, shape, dtype)
    return FoldedEncoding(np.stack([first, first.dtype.type(0.7) * first[::-1]]), mask)


#: name and how to make the operator in a given complex precision.
REGISTRY: dict[str, Callable[[type], LinearOperator]] = {
    "fourier even": lambda dtype: Fourier((12, 16)),
    "fourier odd": lambda dtype: Fourier((11, 15)),
    "fourier rows only": lambda dtype: Fourier((2, 11, 8), axes=(-2,)),
    "differences even": lambda dtype: Differences((12, 8)),
    "differences odd": lambda dtype: Differences((9, 13)),
    "differences one row": lambda dtype: Differences((1, 13)),
    "wavelet haar": lambda dtype: Wavelet((16, 24), "haar"),
    "wavelet db4": lambda dtype: Wavelet((32, 16), "db4"),
    "wavelet db4 odd": lambda dtype: Wavelet((27, 31), "db4"),
    "wavelet sym5": lambda dtype: Wavelet((29, 20), "sym5"),
    "wavelet coif2": lambda dtype: Wavelet((24, 25), "coif2"),
    "wavelet too small to decompose": lambda dtype: Wavelet((5, 6), "db4"),
    "encoding lines even": lambda dtype: _encoding(4, (16, 12), "lines", dtype),
    "encoding lines odd": lambda dtype: _encoding(3, (15, 11), "lines", dtype),
    "encoding points even": lambda dtype: _encoding(4, (12, 16), "points", dtype),
    "encoding points odd": lambda dtype: _encoding(2, (13, 9), "points", dtype),
    "encoding lines weighted": lambda dtype: _weighted((15, 12), per_line=True, dtype=dtype),
    "encoding points weighted": lambda dtype: _weighted((12, 13), per_line=False, dtype=dtype),
    "encoding of two sets lines": lambda dtype: _folded(
        (15, 12), line_mask(15, 12, every=3, calibration=4), dtype
    ),
    "encoding of two sets points": lambda dtype: _folded((12, 12), radial_mask(12, 5), dtype),
    "encoding one coil": lambda dtype: _encoding(1, (11, 16), "lines", dtype),
}


def dense(operator: LinearOperator) -> np.ndarray:
    """Return the operator's matrix, column by column, in double precision."""
    columns = []
    for position in range(int(np.prod(operator.domain_shape))):
        unit = np.zeros(operator.domain_shape, np.complex128)
        unit.flat[position] = 1
        columns.append(operator.forward(unit).ravel())
    return np.stack(columns, axis=1)
