"""Do repeated measurements of a position differ by their noise alone?

    scatter_c = sum_k sum_a |y_a - y|^2 = sum_k (sum_a |y_a|^2 - n |y|^2),   expected: Psi_cc sum_k (n - 1)

y being the mean of the n samples of a position. Where something moved, or the phase of the receiver drifted, the
scatter is larger, and the mean is of different things.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from recon.averages import Samples
from recon.coils.noise import dwell_scale
from recon.findings import Finding
from recon.scan import Scan

#: scatter over noise, in variance, from which averages are said to disagree.
LARGEST_RATIO: Final = 1.5


class Scatter:
    """Adds up the scatter of each channel, plane by plane."""

    def __init__(self, coils: int) -> None:
        self.sums = np.zeros(coils)
        self.freedom = 0

    def see(self, energy: NDArray[np.float64], samples: Samples) -> None:
        """Take in one plane: sum_k sum_a |y_a|^2 of each coil, and the means."""
        for coil, channel in enumerate(samples.kspace):
            squares = channel.real**2 + channel.imag**2
            self.sums[coil] += energy[coil] - float(np.sum(squares * samples.counts, dtype=np.float64))
        self.freedom += int(np.sum(np.maximum(samples.counts - 1, 0)))

    def over_noise(self, scan: Scan) -> float | None:
        """Mean over the coils of scatter over its expectation; None without repeated samples or without `/noise`."""
        noise = scan.noise()
        if noise is None or self.freedom == 0:
            return None
        scale = dwell_scale(
            scan.noise_attributes.get("sample_time_us"),
            scan.attributes.get("sample_time_us"),
            scan.noise_attributes.get("receiver_noise_bandwidth"),
        )
        variance = scale * np.mean(np.abs(noise).astype(np.float64) ** 2, axis=1)
        has_noise = variance > 0
        if not has_noise.any():
            return None
        return float(np.mean(self.sums[has_noise] / variance[has_noise]) / self.freedom)


def scatter_findings(over_noise: float | None) -> list[Finding]:
    """The finding about averages that disagree, if they do."""
    if over_noise is None or over_noise <= LARGEST_RATIO:
        return []
    return [
        Finding(
            "averages-disagree",
            "warning",
            f"Repeated samples scatter by {np.sqrt(over_noise):.2g} times their noise, so their mean is of different "
            f"things: look for motion or phase drift, and label the axis frame to see the averages one by one.",
            "/kspace",
            {"variance_over_noise": over_noise},
        )
    ]
