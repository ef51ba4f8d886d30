"""The one settings model, shared by the HTTP API, the command line and `recon.pipeline.reconstruct`.

Strengths are in noise units: they act on an image whose fully sampled noise has about unit standard deviation, so one
number serves every scanner, coil and scaling. What is not listed here does not exist and is refused.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Annotated, Any, Final, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError

from recon.errors import InvalidSettings, SettingsProblem

#: Orthogonal wavelets of PyWavelets that the solver accepts (Daubechies 1992).
WAVELETS: Final = (
    "haar",
    *(f"db{n}" for n in range(2, 11)),
    *(f"sym{n}" for n in range(2, 11)),
    *(f"coif{n}" for n in range(1, 4)),
)

STRENGTH_LIMIT: Final = 1e6
#: below this a strength does nothing in single precision; 0 says so plainly.
SMALLEST_STRENGTH: Final = 1e-12


def _strength(value: object) -> object:
    if value == "auto":
        return value
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError(
            f'expected "auto" or a number from 0 to {STRENGTH_LIMIT:g} in noise units, received {value!r}'
        )
    if not math.isfinite(value) or not (value == 0 or SMALLEST_STRENGTH <= value <= STRENGTH_LIMIT):
        raise ValueError(
            f'expected "auto" or a number from 0 to {STRENGTH_LIMIT:g} in noise units, received {value}'
        )
    return float(value)


def _number_strength(value: object) -> object:
    if value == "auto":
        raise ValueError(f"expected a number from 0 to {STRENGTH_LIMIT:g} in noise units, received 'auto'")
    return _strength(value)


def _wavelet(value: object) -> object:
    if value not in WAVELETS:
        raise ValueError(f"expected one of {', '.join(WAVELETS)}, received {value!r}")
    return value


def _compression(value: object) -> object:
    accepted = '"auto", null, {"keep_energy": fraction} or {"coils": count}'
    if value is None or value == "auto" or isinstance(value, KeepEnergy | KeepCoils):
        return value
    if isinstance(value, Mapping) and set(value) == {"keep_energy"}:
        energy = value["keep_energy"]
        if isinstance(energy, bool) or not isinstance(energy, int | float) or not 0 < energy <= 1:
            raise ValueError(f"keep_energy: expected a number above 0 and up to 1, received {energy!r}")
        return KeepEnergy(keep_energy=float(energy))
    if isinstance(value, Mapping) and set(value) == {"coils"}:
        count = value["coils"]
        if isinstance(count, bool) or not isinstance(count, int) or count < 1:
            raise ValueError(f"coils: expected a whole number of at least 1, received {count!r}")
        return KeepCoils(coils=count)
    raise ValueError(f"expected {accepted}, received {value!r}")


class KeepEnergy(BaseModel):
    """Keep the virtual coils that hold this fraction of the calibration energy."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    keep_energy: float = Field(gt=0, le=1)


class KeepCoils(BaseModel):
    """Keep this many virtual coils."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    coils: int = Field(ge=1)


Strength = Annotated[float | Literal["auto"], BeforeValidator(_strength)]


EXCLUDABLE: Final = ("dead-coils", "spikes")
Excludable = Literal["dead-coils", "spikes"]


def _exclude(value: object) -> object:
    accepted = f"a list of any of {', '.join(EXCLUDABLE)}"
    if not isinstance(value, list | tuple) or any(item not in EXCLUDABLE for item in value):
        raise ValueError(f"expected {accepted}, received {value!r}")
    return tuple(item for item in EXCLUDABLE if item in value)


class Settings(BaseModel):
    """How one scan is reconstructed.

    Attributes
    ----------
    method : {"compressed-sensing", "tikhonov", "zero-filled"}
    wavelet_strength, tv_strength : "auto" or float
        Weights lambda_w and lambda_t of the objective, in noise units. `auto`: chosen by `recon.tuning`.
    temporal_strength : "auto" or float
        Weight of the total variation along `frame`, which joins the frames of a slice into one problem;
        0: each frame alone. `auto`: chosen where frames can be joined, else 0.
    low_rank_strength : float
        Weight of the nuclear norm of the matrix (frame, pixel); joins the frames likewise.
    tikhonov_strength : "auto" or float
        Weight of 1/2 ||u||^2 in noise units, used by the method `tikhonov`.
    wavelet : str
        One of `WAVELETS`.
    wavelet_shifts : int
        S of cycle spinning: the wavelet term is the mean over S fixed circular shifts; 1 is none. Each shift adds about
        a quarter to the time of an iteration.
    constraint : {"none", "real", "nonnegative"}
        On the image without its low-resolution phase, which comes from the centre of its own k-space and is put back
        into the image written. `tikhonov` takes `real`.
    coil_maps : {"auto", "eigenvector", "adaptive", "supplied"}
        `auto`: the supplied maps when the scan holds `/sensitivity`, else eigenvector maps.
    map_sets : {1, 2}
        Sets of eigenvector maps, and images: two where the object exceeds the field of view and folds onto itself. The
        image written is sqrt(|m_1|^2 + |m_2|^2) with the phase of the first.
    coil_compression : "auto", {"keep_energy": f}, {"coils": n} or null
    combination : {"sensitivity", "root-sum-of-squares", "adaptive"}
        Of iterative methods root-sum-of-squares is the magnitude sqrt(sum_c |S_c m|^2), which is |m|; of `zero-filled`,
        the coil images' own, which needs no maps. Adaptive weighs the coil images of `zero-filled` by their own local
        covariance, which needs no maps and no calibration region either.
    volume : {"planes", "joint"}
        Of a scan with `kz ky kx`: every readout position alone (its mask must not vary along `kx`), or all as one
        problem, whose wavelets and total variation act along three axes. Where readouts are complete, a method without
        iteration gives the same in both.
    exclude : list of {"dead-coils", "spikes"}
        What is left out of the scan before anything is made of it; found and reported whether it is left out or not.
    tolerance : float
        The solver stops when its relative optimality residual falls below this; single precision ends near 1e-6.
    max_iterations : int
        And never later than this.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    method: Literal["compressed-sensing", "tikhonov", "zero-filled"] = "compressed-sensing"
    wavelet_strength: Strength = "auto"
    tv_strength: Strength = "auto"
    temporal_strength: Strength = "auto"
    low_rank_strength: Annotated[float, BeforeValidator(_number_strength)] = 0.0
    tikhonov_strength: Strength = "auto"
    wavelet: Annotated[str, BeforeValidator(_wavelet), Field(json_schema_extra={"enum": list(WAVELETS)})] = (
        "db4"
    )
    wavelet_shifts: int = Field(default=1, ge=1, le=16, strict=True)
    constraint: Literal["none", "real", "nonnegative"] = "none"
    coil_maps: Literal["auto", "eigenvector", "adaptive", "supplied"] = "auto"
    map_sets: int = Field(default=1, ge=1, le=2, strict=True)
    coil_compression: Annotated[
        Literal["auto"] | KeepEnergy | KeepCoils | None, BeforeValidator(_compression)
    ] = "auto"
    combination: Literal["sensitivity", "root-sum-of-squares", "adaptive"] = "sensitivity"
    volume: Literal["planes", "joint"] = "planes"
    exclude: Annotated[tuple[Excludable, ...], BeforeValidator(_exclude)] = ()
    tolerance: float = Field(default=5e-5, ge=1e-6, lt=1, strict=True, allow_inf_nan=False)
    max_iterations: int = Field(default=300, ge=1, le=100_000, strict=True)


def parse_settings(values: Mapping[str, Any] | None) -> Settings:
    """Check a mapping of settings, as it came from JSON.

    Parameters
    ----------
    values : mapping or None
        Setting names and values; None means all defaults.

    Returns
    -------
    Settings

    Raises
    ------
    InvalidSettings
        With one entry for each unknown name and each value out of range.
    """
    if values is not None and not isinstance(values, Mapping):
        raise InvalidSettings(
            [{"pointer": "", "detail": f"expected an object of settings, received {type(values).__name__}"}]
        )
    try:
        return Settings.model_validate(dict(values or {}))
    except ValidationError as error:
        raise InvalidSettings(_problems(error)) from None


def _problems(error: ValidationError) -> list[SettingsProblem]:
    problems: dict[str, str] = {}
    for item in error.errors():
        name = str(item["loc"][0]).replace("~", "~0").replace("/", "~1") if item["loc"] else ""
        detail = item["msg"].removeprefix("Value error, ")
        if item["type"] == "extra_forbidden":
            detail = f"unknown setting; accepted are {', '.join(Settings.model_fields)}"
        elif item["type"] not in {"value_error"}:
            detail = f"{detail[0].lower()}{detail[1:]}, received {item['input']!r}"
        problems.setdefault(f"/{name}", detail)
    return [{"pointer": pointer, "detail": detail} for pointer, detail in problems.items()]
