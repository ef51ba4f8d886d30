"""Coil compression: fewer virtual coils that keep the signal (Buehrer et al. 2007; Huang et al. 2008).

Works on whitened calibration data, so that a virtual coil is judged by its signal over the noise.
"""

from __future__ import annotations

from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from recon.coils.noise import mix
from recon.errors import InvalidSettings
from recon.settings import KeepCoils, KeepEnergy

#: `auto` keeps every virtual coil whose calibration signal exceeds this fraction of the noise variance.
SIGNAL_OVER_NOISE: Final = 0.05
#: and, in a scan without noise, this fraction of the strongest virtual coil's energy.
NOISE_FREE: Final = 1e-6


class Compression:
    """Virtual coils, strongest first.

    Parameters
    ----------
    gram : complex128 (coil, coil)
        Mean of y y^H over the whitened calibration samples.
    rule : "auto", KeepEnergy, KeepCoils or None
        None keeps the channels as they are.
    has_noise_units : bool
        Whether the noise variance is one.
    dominant : complex (coil), optional
        Phase reference in all coils; the dominant singular vector of these calibration data where left out.

    Attributes
    ----------
    matrix : complex128 (virtual coil, coil)
        Orthonormal rows; the identity without compression.
    dominant : complex128 (coil)
        The phase reference of all maps.
    reference : complex128 (virtual coil)
        The same in virtual coils.
    kept_energy : float
        Fraction of the calibration energy in the virtual coils kept.
    """

    def __init__(
        self,
        gram: NDArray[Any],
        rule: Literal["auto"] | KeepEnergy | KeepCoils | None,
        *,
        has_noise_units: bool,
        dominant: NDArray[Any] | None = None,
    ) -> None:
        values, vectors = np.linalg.eigh((gram + gram.conj().T) / 2)
        values, vectors = np.maximum(values[::-1], 0), vectors[:, ::-1]
        count = _count(values, rule, has_noise_units)
        total = float(values.sum()) or 1.0
        if rule is None:
            self.matrix = np.eye(len(gram), dtype=np.complex128)
            self.kept_energy = 1.0
        else:
            self.matrix = vectors[:, :count].conj().T
            self.kept_energy = float(values[:count].sum()) / total
        if dominant is None:
            dominant = vectors[:, 0]
            # eigenvectors carry an arbitrary phase; fix it so that the image does not depend on the library's choice
            dominant = dominant * np.exp(-1j * np.angle(dominant[np.argmax(np.abs(dominant))]))
        self.dominant = dominant
        self.reference = self.matrix @ dominant

    @property
    def coils(self) -> int:
        """Number of virtual coils."""
        return int(self.matrix.shape[0])

    def apply(self, channels: NDArray[Any]) -> NDArray[Any]:
        """Compress an array whose first axis is `coil`."""
        return mix(self.matrix, channels)

    def expand(self, virtual: NDArray[Any]) -> NDArray[Any]:
        """Back to all whitened coils: the adjoint."""
        return mix(self.matrix.conj().T, virtual)


def _count(
    values: NDArray[Any], rule: Literal["auto"] | KeepEnergy | KeepCoils | None, has_noise: bool
) -> int:
    if rule is None:
        return len(values)
    if isinstance(rule, KeepCoils):
        if rule.coils > len(values):
            raise InvalidSettings(
                [
                    {
                        "pointer": "/coil_compression",
                        "detail": f"received {rule.coils} coils for a scan with {len(values)}; accepted is up to that",
                    }
                ]
            )
        return rule.coils
    if isinstance(rule, KeepEnergy):
        shares = np.cumsum(values) / (values.sum() or 1.0)
        return min(int(np.searchsorted(shares, rule.keep_energy * (1 - 1e-12))) + 1, len(values))
    limit = 1 + SIGNAL_OVER_NOISE if has_noise else NOISE_FREE * float(values[0])
    return max(1, int((values > limit).sum()))
