"""What `auto` means for each strength: fixed values in noise units, found on simulated scans of two real heads.

The figures and the grid they were chosen from come out of `benchmarks/quality.py`.
"""

from __future__ import annotations

from typing import Final

from recon.settings import Settings

#: lambda_w and lambda_t where the noise is known.
WAVELET_AUTO: Final = 0.08
TV_AUTO: Final = 0.09
#: lambda_f, between the frames of a series, where the noise is known.
TEMPORAL_AUTO: Final = 0.2
#: weight of 1/2 ||u||^2 where the noise is known.
TIKHONOV_AUTO: Final = 0.03
#: fractions of max |u| of the zero-filled image where the scan is free of noise.
WAVELET_NOISE_FREE: Final = 3e-4
TV_NOISE_FREE: Final = 3e-4
TEMPORAL_NOISE_FREE: Final = 3e-4
TIKHONOV_NOISE_FREE: Final = 1e-4


def resolve_strengths(settings: Settings, *, has_noise_units: bool) -> Settings:
    """Replace every `"auto"` strength by its value.

    Parameters
    ----------
    settings : Settings
    has_noise_units : bool
        Whether the noise is known; without it strengths are fractions of the largest zero-filled image value.

    Returns
    -------
    Settings
    """
    known = {
        "wavelet_strength": WAVELET_AUTO,
        "tv_strength": TV_AUTO,
        "temporal_strength": TEMPORAL_AUTO,
        "tikhonov_strength": TIKHONOV_AUTO,
    }
    noise_free = {
        "wavelet_strength": WAVELET_NOISE_FREE,
        "tv_strength": TV_NOISE_FREE,
        "temporal_strength": TEMPORAL_NOISE_FREE,
        "tikhonov_strength": TIKHONOV_NOISE_FREE,
    }
    values = known if has_noise_units else noise_free
    chosen = {name: value for name, value in values.items() if getattr(settings, name) == "auto"}
    return settings.model_copy(update=chosen)
