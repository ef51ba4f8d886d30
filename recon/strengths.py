"""What is known of each strength before a scan is seen: values in noise units, best on simulated scans of two heads.

`auto` begins at these and moves with what held-out samples of the scan say (`recon.tuning`); where a scan has none to
spare, it ends there. `benchmarks/README.md` has the figures.
"""

from __future__ import annotations

from typing import Final

from recon.settings import Settings

#: lambda_w and lambda_t where the noise is known.
WAVELET_KNOWN: Final = 0.06
TV_KNOWN: Final = 0.06
#: lambda_f, between the frames of a series, where the noise is known.
TEMPORAL_KNOWN: Final = 0.4
#: in a series that is tied together, frames stand in for each other, and each needs less of its own penalties.
SERIES_FACTOR: Final = 0.6
#: weight of 1/2 ||u||^2 where the noise is known.
TIKHONOV_KNOWN: Final = 0.03
#: fractions of max |u| of the zero-filled image where the scan is free of noise.
WAVELET_NOISE_FREE: Final = 3e-4
TV_NOISE_FREE: Final = 3e-4
TEMPORAL_NOISE_FREE: Final = 3e-4
TIKHONOV_NOISE_FREE: Final = 1e-4


def settle_temporal(settings: Settings, *, frames: int, is_volume: bool) -> Settings:
    """Turn an automatic temporal strength off where no frames of planes can be tied together.

    That is a scan of one frame, a volume, two sets of maps, or a method without penalties.
    """
    can_tie = (
        frames > 1 and not is_volume and settings.map_sets == 1 and settings.method == "compressed-sensing"
    )
    if settings.temporal_strength != "auto" or can_tie:
        return settings
    return settings.model_copy(update={"temporal_strength": 0.0})


def resolve_strengths(settings: Settings, *, has_noise_units: bool, frames: int = 1) -> Settings:
    """Replace every `"auto"` strength by what is known of it beforehand.

    Parameters
    ----------
    settings : Settings
    has_noise_units : bool
        Whether the noise is known; without it strengths are fractions of the largest zero-filled image value.
    frames : int
        Of the scan; more than one that something ties together are a series.

    Returns
    -------
    Settings
    """
    known = {
        "wavelet_strength": WAVELET_KNOWN,
        "tv_strength": TV_KNOWN,
        "temporal_strength": TEMPORAL_KNOWN,
        "tikhonov_strength": TIKHONOV_KNOWN,
    }
    noise_free = {
        "wavelet_strength": WAVELET_NOISE_FREE,
        "tv_strength": TV_NOISE_FREE,
        "temporal_strength": TEMPORAL_NOISE_FREE,
        "tikhonov_strength": TIKHONOV_NOISE_FREE,
    }
    values = known if has_noise_units else noise_free
    if frames > 1 and (settings.temporal_strength != 0 or settings.low_rank_strength > 0):
        values = {
            **values,
            **{name: SERIES_FACTOR * values[name] for name in ("wavelet_strength", "tv_strength")},
        }
    chosen = {name: value for name, value in values.items() if getattr(settings, name) == "auto"}
    return settings.model_copy(update=chosen)
