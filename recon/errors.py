"""The errors that the numerics raise: one root, and a builtin parent for whoever knows only that."""

from __future__ import annotations

from typing import TypedDict


class ReconError(Exception):
    """Root of every error that `recon` raises on purpose."""


class InvalidScan(ReconError, ValueError):
    """A scan that cannot be accepted; the message names what was received, what is accepted and what to do."""


class CalibrationMissing(InvalidScan):
    """Coil maps are needed, but the scan holds neither a calibration region nor maps."""


class SettingsProblem(TypedDict):
    """One refused setting: a JSON pointer to it and the reason."""

    pointer: str
    detail: str


class InvalidSettings(ReconError, ValueError):
    """Settings out of range, unknown, or unfit for the scan at hand.

    Attributes
    ----------
    errors : list of SettingsProblem
        One entry for each refused setting.
    """

    def __init__(self, errors: list[SettingsProblem]) -> None:
        self.errors = errors
        super().__init__(
            "; ".join(f"{e['pointer'].lstrip('/') or 'settings'}: {e['detail']}" for e in errors)
        )


class Cancelled(ReconError):
    """Raised by a progress callback to stop a reconstruction between two iterations."""
