"""Findings: what the tool noticed about the raw data or the solve, in words that say what to do."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

Severity = Literal["info", "warning", "error"]


@dataclass(frozen=True)
class Finding:
    """One observation.

    Attributes
    ----------
    code : str
        Stable identifier, lower case with hyphens.
    severity : {"info", "warning", "error"}
        How much it matters for trusting the image.
    message : str
        One plain sentence that says what to do.
    where : str or None
        Object, axis and index that the finding is about.
    numbers : mapping
        The figures behind it.
    """

    code: str
    severity: Severity
    message: str
    where: str | None = None
    numbers: Mapping[str, float | int] = field(default_factory=dict)

    def as_dict(self) -> dict[str, Any]:
        """Return the JSON form used in reports and by the service."""
        return {
            "code": self.code,
            "severity": self.severity,
            "message": self.message,
            "where": self.where,
            "numbers": dict(self.numbers),
        }
