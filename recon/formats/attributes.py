"""The attributes of `/kspace` and `/noise` in the scan layout: name, form, range. One row each."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final

import h5py
import numpy as np

from recon.errors import InvalidScan
from recon.findings import Finding
from recon.formats.hdf5 import text

Value = float | str | list[float]


@dataclass(frozen=True)
class Rule:
    """How one attribute is checked: `read` returns the plain value or None when it does not fit."""

    accepted: str
    read: Callable[[Any], Value | None]


def _number(low: float, high: float, *, low_open: bool = False) -> Callable[[Any], Value | None]:
    def read(value: Any) -> Value | None:
        array = np.asarray(value)
        if array.size != 1 or array.dtype.kind not in "fiu":
            return None
        number = float(array.reshape(-1)[0])
        fits = np.isfinite(number) and (low < number if low_open else low <= number) and number <= high
        return number if fits else None

    return read


def _numbers(count: int | None, *, positive: bool) -> Callable[[Any], Value | None]:
    def read(value: Any) -> Value | None:
        array = np.asarray(value)
        if (
            array.dtype.kind not in "fiu"
            or (count is not None and array.size % count != 0)
            or array.size == 0
        ):
            return None
        numbers = array.reshape(-1).astype(np.float64)
        if not np.isfinite(numbers).all() or (positive and (numbers <= 0).any()):
            return None
        return [float(number) for number in numbers]

    return read


def _exactly(count: int, *, positive: bool) -> Callable[[Any], Value | None]:
    read = _numbers(None, positive=positive)

    def checked(value: Any) -> Value | None:
        return read(value) if np.asarray(value).size == count else None

    return checked


def _direction(value: Any) -> Value | None:
    numbers = _exactly(3, positive=False)(value)
    if not isinstance(numbers, list) or abs(float(np.linalg.norm(numbers)) - 1) > 1e-3:
        return None
    return numbers


def _matrix(value: Any) -> Value | None:
    numbers = _exactly(3, positive=True)(value)
    if not isinstance(numbers, list) or any(number != round(number) for number in numbers):
        return None
    return numbers


def _patient_position(value: Any) -> Value | None:
    known = ("HFP", "HFS", "HFDR", "HFDL", "FFP", "FFS", "FFDR", "FFDL")
    position = text(value)
    return position if position in known else None


KSPACE_ATTRIBUTES: Final[Mapping[str, Rule]] = {
    "field_of_view_mm": Rule("three positive numbers x, y, z in mm", _exactly(3, positive=True)),
    "readout_oversampling": Rule("a number from 1 to 16", _number(1, 16)),
    "phase_oversampling": Rule("a number from 1 to 16", _number(1, 16)),
    "reconstructed_matrix": Rule("three whole numbers x, y, z", _matrix),
    "slice_position_mm": Rule("three numbers for each slice, in mm", _numbers(3, positive=False)),
    "read_direction": Rule("a unit vector of three numbers", _direction),
    "phase_direction": Rule("a unit vector of three numbers", _direction),
    "slice_direction": Rule("a unit vector of three numbers", _direction),
    "patient_position": Rule("one of HFP HFS HFDR HFDL FFP FFS FFDR FFDL", _patient_position),
    "slice_spacing_mm": Rule("a positive number in mm", _number(0, 1e6, low_open=True)),
    "frame_interval_ms": Rule("a positive number in ms", _number(0, 1e9, low_open=True)),
    "echo_times_ms": Rule("positive numbers in ms", _numbers(None, positive=True)),
    "sample_time_us": Rule("a positive number in microseconds", _number(0, 1e9, low_open=True)),
}
NOISE_ATTRIBUTES: Final[Mapping[str, Rule]] = {
    "sample_time_us": KSPACE_ATTRIBUTES["sample_time_us"],
    "receiver_noise_bandwidth": Rule("a number above 0 and up to 1", _number(0, 1, low_open=True)),
}
#: written by HDF5 libraries and by the axis labels themselves.
_STRUCTURAL: Final = {
    "axes", "axes_fastest_first", "DIMENSION_LABELS", "DIMENSION_LIST", "REFERENCE_LIST", "CLASS", "NAME",
    "MATLAB_class", "MATLAB_int_decode", "MATLAB_empty", "_FillValue", "_Netcdf4Dimid",
}  # fmt: skip


def check_value(where: str, name: str, value: Any, rules: Mapping[str, Rule]) -> Value:
    """Return one attribute as a plain value.

    Raises
    ------
    InvalidScan
        When the value does not fit the rule.
    """
    found = rules[name].read(value)
    if found is None:
        raise InvalidScan(f"{where}: attribute {name} is {_shown(value)}; accepted is {rules[name].accepted}")
    return found


def read_attributes(
    found: h5py.Dataset, where: str, rules: Mapping[str, Rule]
) -> tuple[dict[str, Value], list[Finding]]:
    """Read and check all attributes of one dataset.

    Returns
    -------
    attributes : dict
        Plain values by name.
    findings : list of Finding
        One for each attribute that the layout does not know.

    Raises
    ------
    InvalidScan
        When a known attribute does not fit its rule.
    """
    values: dict[str, Value] = {}
    findings: list[Finding] = []
    try:
        names = list(found.attrs)
    except (OSError, RuntimeError):
        raise InvalidScan(
            f"{where}: its attributes cannot be read; the file is damaged, write it again"
        ) from None
    for name in names:
        if name in rules:
            try:
                raw = found.attrs[name]
            except (OSError, RuntimeError, TypeError, ValueError):
                raise InvalidScan(
                    f"{where}: attribute {name} cannot be read; write it as a plain value"
                ) from None
            values[name] = check_value(where, name, raw, rules)
        elif name not in _STRUCTURAL:
            findings.append(
                Finding(
                    "attribute-ignored",
                    "info",
                    f"{where} carries the attribute {_shown(name)}, which the scan layout does not know: it has no "
                    f"effect; correct the name if it is a slip (known are {', '.join(rules)}).",
                    where,
                )
            )
    return values, findings


def check_slices(values: Mapping[str, Value], slices: int) -> None:
    """Raise `InvalidScan` when `slice_position_mm` does not hold one position for each slice."""
    positions = values.get("slice_position_mm")
    if isinstance(positions, list) and len(positions) != 3 * slices:
        raise InvalidScan(
            f"/kspace: slice_position_mm holds {len(positions) / 3:g} positions for {slices} slices; write one each"
        )


def _shown(value: Any) -> str:
    shown = str(text(value) if text(value) is not None else value).replace("\n", " ")
    return "".join(character if character.isprintable() else "?" for character in shown[:80])
