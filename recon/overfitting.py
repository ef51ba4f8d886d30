"""Settings that leave the fit to its data alone."""

from __future__ import annotations

from recon.findings import Finding
from recon.settings import Settings

#: strengths by method; a fit with none of them above zero is plain least squares.
_STRENGTHS = {
    "compressed-sensing": ("wavelet_strength", "tv_strength", "temporal_strength", "low_rank_strength"),
    "tikhonov": ("tikhonov_strength",),
}


def least_squares_findings(settings: Settings, sampled_fraction: float) -> list[Finding]:
    """Says so when every strength is zero though k-space has gaps: least squares alone then fits the noise.

    Parameters
    ----------
    settings : Settings
    sampled_fraction : float
        Share of the positions that were measured.
    """
    names = _STRENGTHS.get(settings.method, ())
    if not names or sampled_fraction >= 1 or any(getattr(settings, name) != 0 for name in names):
        return []
    return [
        Finding(
            "least-squares-alone",
            "warning",
            f"Every strength is zero though only {sampled_fraction:.0%} of k-space was measured: plain least squares "
            f'fits the noise, so set {" or ".join(names[:2])} to "auto" unless that is what you want to see.',
            "settings",
            {"sampled_fraction": sampled_fraction},
        )
    ]
