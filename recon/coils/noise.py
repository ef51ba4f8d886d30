"""Noise covariance of the receive channels and the whitening that makes it the identity.

After whitening the noise of every channel is independent with E|n|^2 = 1 for each complex sample, so that strengths,
residuals and intensities no longer depend on the receiver (Pruessmann 2001; Kellman & McVeigh 2005).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.errors import InvalidScan
from recon.operators.fourier import inverse_transform
from recon.scan import PlaneIndex, Scan

#: eigenvalues of the covariance below this fraction of the largest are raised to it, so that a channel without any
#: noise (a dead coil) does not get infinite weight.
SMALLEST_EIGENVALUE: Final = 1e-8
#: planes looked at when the noise has to be estimated from the k-space periphery.
PERIPHERY_PLANES: Final = 8
#: share of the sampled positions, those farthest from the centre, taken as periphery.
PERIPHERY_SHARE: Final = 0.05
#: an estimate this far below the largest sample is rounding, not noise: the scan counts as free of noise.
ROUNDING: Final = 1e-6


@dataclass(frozen=True)
class Whitening:
    """The whitener and where it came from.

    Attributes
    ----------
    whitener : complex128 (coil, coil)
        Psi^(-1/2): whitened channels = whitener @ channels. Without noise: one over the
        largest zero-filled image value, times the identity.
    unwhitener : complex128 (coil, coil)
        Its inverse.
    covariance : complex128 (coil, coil)
        Psi of the combined averages at the image's dwell time, in the square of the data's units.
    source : {"noise-scan", "periphery", "none"}
        `none`: the scan is free of noise, strengths are fractions of the largest zero-filled image value.
    samples : int
        Complex samples for each coil behind the estimate.
    clamped : int
        Directions among the coils with next to no noise, which were raised to `SMALLEST_EIGENVALUE`.
    """

    whitener: NDArray[Any]
    unwhitener: NDArray[Any]
    covariance: NDArray[Any]
    source: str
    samples: int
    clamped: int = 0

    @property
    def has_noise_units(self) -> bool:
        """Whether whitened data are in units of the noise."""
        return self.source != "none"

    def apply(self, channels: NDArray[Any]) -> NDArray[Any]:
        """Whiten an array whose first axis is `coil`; complex64 in and out."""
        return mix(self.whitener, channels)


def mix(matrix: NDArray[Any], channels: NDArray[Any]) -> NDArray[Any]:
    """Apply a matrix (out, coil) along the first axis of `channels`, keeping its precision."""
    flat = channels.reshape(channels.shape[0], -1)
    mixed: NDArray[Any] = matrix.astype(channels.dtype) @ flat
    return mixed.reshape(matrix.shape[0], *channels.shape[1:])


def sample_covariance(samples: NDArray[Any]) -> NDArray[Any]:
    """Psi = n n^H / samples for complex n of shape (coil, sample), zero mean assumed; complex128."""
    values = samples.astype(np.complex128)
    return np.asarray(values @ values.conj().T / values.shape[1])


def dwell_scale(
    noise_time_us: float | None, image_time_us: float | None, receiver_noise_bandwidth: float | None
) -> float:
    """Factor from the noise scan's covariance to the image's.

    Psi_image = Psi_noise * (noise dwell / image dwell) / receiver_noise_bandwidth (Kellman & McVeigh 2005): a longer
    dwell lets in less noise, and the receiver's filter has lowered the mean noise power that was measured.
    """
    scale = 1.0 if noise_time_us is None or image_time_us is None else noise_time_us / image_time_us
    return scale if receiver_noise_bandwidth is None else scale / receiver_noise_bandwidth


def whitening_from(covariance: NDArray[Any], source: str, samples: int) -> Whitening:
    """Hermitian square roots of a covariance.

    The inverse of a covariance estimated from n samples of C coils is too large by n / (n - C) on average
    (Wishart). The whitener carries that factor, so that whitened noise has unit variance in the mean.

    Parameters
    ----------
    covariance : complex (coil, coil)
    source : str
        See `Whitening`.
    samples : int
        n; 0 for a covariance that is known.

    Raises
    ------
    InvalidScan
        When it is zero or not finite.
    """
    values, vectors = np.linalg.eigh((covariance + covariance.conj().T) / 2)
    largest = float(values[-1])
    if not np.isfinite(largest) or largest <= 0:
        raise InvalidScan("/noise holds only zeros; write the noise readouts as measured or leave /noise out")
    floor = SMALLEST_EIGENVALUE * largest
    freedom = samples - len(covariance)
    inflation = samples / freedom if source == "noise-scan" and freedom > 0 else 1.0
    root = np.sqrt(inflation * np.maximum(values, floor))
    return Whitening(
        whitener=(vectors / root) @ vectors.conj().T,
        unwhitener=(vectors * root) @ vectors.conj().T,
        covariance=covariance,
        source=source,
        samples=samples,
        clamped=int((values < floor).sum()),
    )


def estimate_whitening(
    scan: Scan, mean_count: float = 1.0, periphery: Scan | None = None, silent: Sequence[int] = ()
) -> Whitening:
    """Whitening from `/noise`, or from the periphery of k-space where there is none.

    Parameters
    ----------
    scan : Scan
    mean_count : float
        Samples behind a sampled position, in the mean: the noise of their mean has Psi over that as its covariance.
    periphery : Scan, optional
        Where to look for the periphery, if not in the scan itself.
    silent : sequence of int
        Coils that `/noise` does not show: they get the median variance of the others, since without any noise they
        would have all the weight.

    Raises
    ------
    InvalidScan
        When `/noise` holds only zeros, or NaN or Inf.
    """
    noise = scan.noise()
    if noise is not None:
        if not np.isfinite(noise).all():
            raise InvalidScan("/noise contains NaN or Inf; write finite numbers or leave /noise out")
        scale = dwell_scale(
            scan.noise_attributes.get("sample_time_us"),
            scan.attributes.get("sample_time_us"),
            scan.noise_attributes.get("receiver_noise_bandwidth"),
        )
        covariance = _completed(sample_covariance(noise), silent) * (scale / mean_count)
        return whitening_from(covariance, "noise-scan", noise.shape[1])
    covariance, samples, largest = periphery_covariance(periphery or scan)
    if largest == 0.0 or np.sqrt(np.trace(covariance).real / scan.coils) <= ROUNDING * largest:
        identity = np.eye(scan.coils, dtype=np.complex128)
        unit = max(_largest_zero_filled(scan, index) for index in scan.planes()) or 1.0
        return Whitening(identity / unit, identity * unit, identity * 0, "none", 0)
    # what signal is left out there is coherent between coils and would be whitened away: variances alone are trusted
    return whitening_from(np.diag(np.diag(covariance)) / mean_count, "periphery", samples)


def _completed(covariance: NDArray[Any], silent: Sequence[int]) -> NDArray[Any]:
    """The covariance with the silent coils uncorrelated and as noisy as the others are in the median."""
    if not silent:
        return covariance
    completed = covariance.copy()
    others = np.delete(np.diag(covariance).real, silent)
    completed[silent, :] = completed[:, silent] = 0
    completed[silent, silent] = np.median(others)
    return completed


def periphery_covariance(scan: Scan) -> tuple[NDArray[Any], int, float]:
    """Covariance of single samples at the positions farthest from the k-space centre.

    What little signal is left there makes the estimate too large rather than too small.

    Returns
    -------
    covariance : complex128 (coil, coil)
    samples : int
        Positions used.
    largest : float
        Largest magnitude of any sample seen.
    """
    rows, columns = scan.plane_shape
    distance = np.hypot(
        (np.arange(rows)[:, np.newaxis] - rows // 2) / max(rows / 2, 1),
        (np.arange(columns) - columns // 2) / max(columns / 2, 1),
    )
    planes = scan.planes()
    chosen = planes[:: max(1, len(planes) // PERIPHERY_PLANES)]
    total = np.zeros((scan.coils, scan.coils), np.complex128)
    samples, largest = 0, 0.0
    for index in chosen:
        for kspace, mask in scan.each_average(index):
            sampled = mask & np.any(kspace != 0, axis=0)
            if not sampled.any():
                continue
            largest = max(largest, float(np.abs(kspace[:, sampled]).max()))
            count = max(int(PERIPHERY_SHARE * sampled.sum()), min(4 * scan.coils, int(sampled.sum())))
            far = np.sort(distance[sampled])[-count]
            values = kspace[:, sampled & (distance >= far)]
            total += sample_covariance(values) * values.shape[1]
            samples += values.shape[1]
    return total / max(samples, 1), samples, largest


def _largest_zero_filled(scan: Scan, index: PlaneIndex) -> float:
    images = inverse_transform(scan.samples(index).kspace)
    return float(np.sqrt(np.sum(np.abs(images) ** 2, axis=0)).max())
