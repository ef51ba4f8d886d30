"""Signal and noise of each receive channel: which ones deliver next to nothing, in the scan or in its noise readouts.

    signal r_c = rms of the samples,   noise s_c = rms of /noise,   both relative to the median over the coils

Receivers differ in gain and loops in distance, so only what lies far below the others counts as dead.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.findings import Finding

#: a channel with less than this share of the median signal, or of both median signal and median noise, is dead.
DEAD_SIGNAL: Final = 1e-3
DEAD_BOTH: Final = 0.02
#: and one whose noise, relative to its signal, is below this share of the others' was not recorded in /noise.
SILENT: Final = 1e-3


@dataclass(frozen=True)
class ChannelFacts:
    """Channels that stand apart.

    Attributes
    ----------
    dead : tuple of int
        They deliver next to nothing.
    silent_in_noise : tuple of int
        They deliver signal, but no noise in `/noise`.
    """

    dead: tuple[int, ...] = ()
    silent_in_noise: tuple[int, ...] = ()

    def as_dict(self) -> dict[str, list[int]]:
        """Plain JSON form."""
        return {"dead": list(self.dead), "silent_in_noise": list(self.silent_in_noise)}

    def findings(self) -> list[Finding]:
        """What there is to say about them."""
        found = []
        if self.dead:
            found.append(
                Finding(
                    "dead-coil",
                    "warning",
                    f"{_names(self.dead)} next to nothing beside the others: look for a dead or differently scaled "
                    f'channel, and set exclude to ["dead-coils"] to leave it out.',
                    _where(self.dead),
                    {"coils": len(self.dead), "first": self.dead[0]},
                )
            )
        if self.silent_in_noise:
            found.append(
                Finding(
                    "coil-silent-in-noise",
                    "warning",
                    f"{_names(self.silent_in_noise)} signal but no noise in /noise, so the median noise of the others "
                    f"is assumed there: write /noise as measured, or leave it out.",
                    _where(self.silent_in_noise),
                    {"coils": len(self.silent_in_noise), "first": self.silent_in_noise[0]},
                )
            )
        return found


class ChannelLevels:
    """Adds up the signal of each channel, plane by plane."""

    def __init__(self, coils: int) -> None:
        self.energy = np.zeros(coils)

    def see(self, kspace: NDArray[Any], mask: NDArray[np.bool_]) -> None:
        """Take in samples, complex (coil, rows, columns), where the mask (rows, columns) is true."""
        for coil, channel in enumerate(kspace):
            squares = channel.real**2 + channel.imag**2
            self.energy[coil] += np.sum(squares, dtype=np.float64, where=mask)

    def judge(self, noise: NDArray[Any] | None) -> ChannelFacts:
        """Channels that stand apart, given the noise readouts, complex (coil, sample)."""
        if len(self.energy) == 1:
            return ChannelFacts()
        signal = _relative(np.sqrt(self.energy))
        is_dead = signal < DEAD_SIGNAL
        if noise is None:
            return ChannelFacts(_positions(is_dead))
        level = _relative(np.sqrt(np.mean(np.abs(noise).astype(np.float64) ** 2, axis=1)))
        if not level.any():
            return ChannelFacts(_positions(is_dead))  # /noise holds nothing at all: refused where it is used
        is_dead |= (signal < DEAD_BOTH) & (level < DEAD_BOTH)
        return ChannelFacts(_positions(is_dead), _positions(~is_dead & (level < SILENT * signal)))


def _relative(levels: NDArray[np.float64]) -> NDArray[np.float64]:
    """Levels over the median of those that are not zero."""
    some = levels[levels > 0]
    return levels / np.median(some) if some.size else levels


def _positions(is_so: NDArray[np.bool_]) -> tuple[int, ...]:
    return tuple(int(coil) for coil in np.flatnonzero(is_so))


def _names(coils: tuple[int, ...]) -> str:
    listed = ", ".join(str(coil) for coil in coils)
    return f"Coil {listed} delivers" if len(coils) == 1 else f"Coils {listed} deliver"


def _where(coils: tuple[int, ...]) -> str:
    return "coil " + ", ".join(str(coil) for coil in coils)
