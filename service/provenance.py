"""Where an image comes from: versions, machine and time, which `recon` does not know."""

from __future__ import annotations

import json
import platform
import socket
from collections.abc import Mapping
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any, Final

from pydantic import BaseModel

#: Packages whose version can change an image.
_PACKAGES: Final = ("numpy", "scipy", "PyWavelets", "h5py", "numba", "pydantic", "pillow")


def fallow_version() -> str:
    """Version of the installed distribution; `uninstalled` when run from a bare source tree."""
    try:
        return version("fallow")
    except PackageNotFoundError:
        return "uninstalled"


def collect(scan_sha256: str, settings: BaseModel | Mapping[str, Any]) -> dict[str, Any]:
    """Gather the provenance of one reconstruction that is about to start.

    Parameters
    ----------
    scan_sha256 : str
        Hexadecimal SHA-256 of the scan file.
    settings : Settings or mapping
        As resolved.

    Returns
    -------
    dict
        `version`, `settings`, `scan_sha256`, `packages`, `python`, `host`, `started_at` (ISO 8601, UTC).
    """
    return {
        "version": fallow_version(),
        "settings": settings.model_dump(mode="json") if isinstance(settings, BaseModel) else dict(settings),
        "scan_sha256": scan_sha256,
        "packages": {name: _installed(name) for name in _PACKAGES},
        "python": platform.python_version(),
        "host": socket.gethostname(),
        "started_at": datetime.now(UTC).isoformat(timespec="milliseconds"),
    }


def add_duration(image: Path, report: dict[str, Any], seconds: float) -> None:
    """Write how long a reconstruction took into its result file and its report, both not yet in their places.

    Parameters
    ----------
    image : Path
        The result file.
    report : dict
        Changed in place.
    seconds : float
        From start to written image.
    """
    import h5py

    report["provenance"] = {
        **report["provenance"],
        "settings": report["settings"],
        "duration_seconds": round(seconds, 3),
    }
    with h5py.File(image, "r+") as file:
        file.attrs["report"] = json.dumps(report, allow_nan=False)
        file.attrs["provenance"] = json.dumps(report["provenance"], allow_nan=False)


def _installed(name: str) -> str | None:
    try:
        return version(name)
    except PackageNotFoundError:
        return None
