"""Can these settings work with this scan? Judged on the scan's stored facts, before any time is spent."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NoReturn

from recon.coils.calibration import check_block, prefers_time_average
from recon.errors import InvalidScan, InvalidSettings
from recon.settings import Settings


def check_job(facts: Mapping[str, Any], settings: Settings) -> None:
    """Refuse settings that cannot work with a scan, before any time is spent on it.

    Parameters
    ----------
    facts : mapping
        `Inspection.as_dict()` of the scan.
    settings : Settings

    Raises
    ------
    CalibrationMissing
        When the settings need coil maps and there is nothing to compute them from.
    InvalidSettings
        For more virtual coils than coils, supplied maps that are not there, or a `volume` that the axes or the mask do
        not fit.
    """
    _check_volume(facts, settings)
    _check_constraint(settings)
    coils = int(facts["axes"].get("coil", 1))
    rule = settings.coil_compression
    wanted = getattr(rule, "coils", None)
    if wanted is not None and wanted > coils:
        raise InvalidSettings(
            [
                {
                    "pointer": "/coil_compression",
                    "detail": f"received {wanted} coils for a scan with {coils}; accepted is up to that",
                }
            ]
        )
    has_maps = bool(facts["objects"]["sensitivity"])
    if settings.combination == "adaptive":
        _check_adaptive(facts, settings)
    if settings.map_sets > 1:
        _check_map_sets(facts, settings)
    if settings.coil_maps == "supplied" and not has_maps:
        raise InvalidSettings(
            [
                {
                    "pointer": "/coil_maps",
                    "detail": "received supplied, but the scan has no /sensitivity; add maps or choose eigenvector",
                }
            ]
        )
    if has_maps and settings.coil_maps in ("auto", "supplied"):
        encoded = int(facts["axes"]["kx" if "kx" in facts["axes"] else "ky"])
        if facts["sampling"]["varies_along_readout"] and facts["objects"]["sensitivity"][-1] < encoded:
            raise InvalidScan(
                f"/sensitivity has {facts['objects']['sensitivity'][-1]} columns, but the mask varies along kx, so "
                f"that the image is solved with its oversampling: supply maps with {encoded} columns"
            )
        return
    if not needs_maps(settings, coils):
        return
    matrix = tuple(facts["image"].get("solved_plane") or facts["image"]["matrix"])
    if facts["objects"]["reference"] is not None:
        rows, columns = facts["objects"]["reference"]
        check_block(rows, columns, (matrix[0], matrix[1]), "/reference")
    else:
        check_block(*calibration_sides(facts["sampling"]), (matrix[0], matrix[1]), "the scan")


def calibration_sides(sampling: Mapping[str, Any]) -> tuple[int, int]:
    """Rows and columns of the calibration region that maps are computed from: of single planes or the time average."""
    single, average = (
        (int(block["rows"]), int(block["columns"])) if block else (0, 0)
        for block in (sampling["calibration"], sampling.get("time_average_calibration"))
    )
    return average if prefers_time_average(single, average) else single


def _check_volume(facts: Mapping[str, Any], settings: Settings) -> None:
    axes = facts["axes"]
    if not {"kz", "ky", "kx"} <= set(axes):
        if settings.volume == "joint":
            _refuse(
                "/volume",
                f"received joint for a scan with the axes {', '.join(axes)}; accepted is joint where kz, ky and kx are "
                f"all there: label the axes of /kspace so, or choose planes",
            )
        return
    for name in ("temporal_strength", "low_rank_strength"):
        if axes.get("frame", 1) > 1 and getattr(settings, name) not in (0, "auto"):
            _refuse(
                f"/{name}",
                f"received {getattr(settings, name)} for a volume with frames; accepted is 0: each frame is a volume "
                f"of its own",
            )
    if settings.volume == "planes" and facts["sampling"]["varies_along_readout"]:
        _refuse(
            "/volume",
            "received planes, but the mask varies along kx, so that readouts cannot be transformed on their own; "
            "choose joint, or a mask that is constant along kx",
        )


def _check_adaptive(facts: Mapping[str, Any], settings: Settings) -> None:
    """Adaptive combination is that of the coil images of one plane."""
    if settings.method != "zero-filled":
        _refuse(
            "/combination",
            f"received adaptive with the method {settings.method}, which solves for one image of all coils; accepted "
            f"is adaptive with zero-filled: set coil_maps to adaptive instead, and combination to sensitivity",
        )
    is_volume = {"kz", "ky", "kx"} <= set(facts["axes"])
    if is_volume and facts["sampling"]["varies_along_readout"]:
        _refuse(
            "/combination",
            "received adaptive for a volume whose mask varies along kx; accepted is adaptive where planes are combined "
            "one by one: choose root-sum-of-squares",
        )


def _check_constraint(settings: Settings) -> None:
    """A constraint needs a method that can hold it, one image, and the phase of that image."""
    received = settings.constraint
    if received == "none":
        return
    if settings.method == "zero-filled" or (settings.method == "tikhonov" and received == "nonnegative"):
        _refuse(
            "/constraint",
            f"received {received} with the method {settings.method}; accepted is none with zero-filled, none or real "
            f"with tikhonov, any with compressed-sensing: choose another method or constraint",
        )
    if settings.map_sets > 1:
        _refuse(
            "/constraint",
            f"received {received} with map_sets {settings.map_sets}; accepted is a constraint with one set of maps: "
            f"set map_sets to 1, or constraint to none",
        )


def _check_map_sets(facts: Mapping[str, Any], settings: Settings) -> None:
    """Two sets are those of eigenvector maps, and solved plane by plane."""
    axes = facts["axes"]
    is_supplied = settings.coil_maps == "auto" and bool(facts["objects"]["sensitivity"])
    if int(axes.get("coil", 1)) == 1 or is_supplied or settings.coil_maps not in ("auto", "eigenvector"):
        what = (
            "one coil"
            if int(axes.get("coil", 1)) == 1
            else "supplied maps"
            if is_supplied
            else settings.coil_maps
        )
        _refuse(
            "/map_sets",
            f"received 2 with {what}; accepted is 2 with eigenvector maps of several coils: set coil_maps to "
            f"eigenvector, or map_sets to 1",
        )
    if not needs_maps(settings, int(axes.get("coil", 1))):
        _refuse(
            "/map_sets",
            "received 2 for images combined coil by coil, which need no maps; accepted is 1: choose the combination "
            "sensitivity for two sets",
        )
    for name in ("temporal_strength", "low_rank_strength"):
        if axes.get("frame", 1) > 1 and getattr(settings, name) not in (0, "auto"):
            _refuse(
                "/map_sets",
                f"received 2 with {name} {getattr(settings, name)}; accepted is 2 where frames are solved one by one: "
                f"set {name} to 0, or map_sets to 1",
            )
    if settings.volume == "joint":
        _refuse(
            "/map_sets",
            "received 2 with the volume joint; accepted is 2 where planes are solved one by one: set volume to planes",
        )


def _refuse(pointer: str, detail: str) -> NoReturn:
    raise InvalidSettings([{"pointer": pointer, "detail": detail}])


def needs_maps(settings: Settings, coils: int) -> bool:
    """Whether a reconstruction with these settings uses coil maps at all."""
    is_coilwise = settings.method == "zero-filled" and settings.combination != "sensitivity"
    return coils > 1 and not is_coilwise
