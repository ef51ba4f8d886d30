"""Arrays in memory written as a scan file of layout version 1.

The layout is written here once more, independently of `recon`, because the client must not import it: a user's own
script is likely called ``recon.py`` and would be found first.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from service.client.errors import InputRefused

#: Datasets that a scan may hold, and the name under which their axis labels are given.
_DATASETS = {
    "kspace": "axes",
    "mask": "mask_axes",
    "noise": "noise_axes",
    "reference": "reference_axes",
    "sensitivity": "sensitivity_axes",
}
_ROOT_ATTRIBUTES = ("title", "acquired_at", "repetition_time_ms")
_ATTRIBUTE_MAPPINGS = {"attributes": "kspace", "noise_attributes": "noise"}
_ACCEPTED = (*_DATASETS, *_DATASETS.values(), *_ROOT_ATTRIBUTES, *_ATTRIBUTE_MAPPINGS)


def write_arrays(path: Path, arrays: Mapping[str, Any]) -> None:
    """Write arrays as a scan file.

    Parameters
    ----------
    path : Path
        File to be written.
    arrays : mapping
        `kspace` (complex) and `axes`, its labels in C order, as a sequence or as one string like ``"coil,ky,kx"``.
        Optional: `mask` (bool) with `mask_axes` (default: those of `kspace` without ``coil``), `noise` (complex;
        `noise_axes` default ``coil,sample``), `reference` with `reference_axes` (default: those of `kspace`),
        `sensitivity` with `sensitivity_axes` (image axes), `title`, `acquired_at`, `repetition_time_ms`, and the
        mappings `attributes` and `noise_attributes` (written on ``/kspace`` and ``/noise``).

    Raises
    ------
    InputRefused
        `kspace` or labels are missing, a name is unknown, or labels and dimensions differ in number.
    """
    import h5py
    import numpy as np

    unknown = sorted(set(arrays) - set(_ACCEPTED))
    if unknown:
        raise InputRefused(
            f"Unknown entry {unknown[0]!r} among the arrays: accepted are {', '.join(_ACCEPTED)}."
        )
    if arrays.get("kspace") is None:
        raise InputRefused(
            "The arrays hold no `kspace`: give the measured samples under that name, with their `axes`."
        )

    with h5py.File(path, "w") as file:
        file.attrs["layout"] = "fallow-scan"
        file.attrs["layout_version"] = 1
        for name in _ROOT_ATTRIBUTES:
            if arrays.get(name) is not None:
                file.attrs[name] = arrays[name]
        for name, labels_name in _DATASETS.items():
            if arrays.get(name) is None:
                continue
            values = np.asarray(arrays[name])
            labels = _labels(arrays, name, labels_name)
            if len(labels) != values.ndim:
                raise InputRefused(
                    f"`{labels_name}` names {len(labels)} axes ({', '.join(labels)}), but `{name}` has {values.ndim} "
                    f"dimensions {values.shape}: name each dimension once, in the order of the shape."
                )
            dataset = file.create_dataset(name, data=values)
            for position, label in enumerate(labels):
                dataset.dims[position].label = label
        for mapping_name, dataset_name in _ATTRIBUTE_MAPPINGS.items():
            attributes = arrays.get(mapping_name) or {}
            if attributes and dataset_name not in file:
                raise InputRefused(
                    f"`{mapping_name}` is given without `{dataset_name}`: give both or neither."
                )
            for name, value in attributes.items():
                file[dataset_name].attrs[name] = value


def _labels(arrays: Mapping[str, Any], name: str, labels_name: str) -> tuple[str, ...]:
    given: str | Sequence[str] | None = arrays.get(labels_name)
    if isinstance(given, str):
        return tuple(label.strip() for label in given.split(","))
    if given is not None:
        return tuple(given)
    if name == "noise":
        return ("coil", "sample")
    if name == "mask":
        return tuple(label for label in _labels(arrays, "kspace", "axes") if label != "coil")
    if name == "reference":
        return _labels(arrays, "kspace", "axes")
    raise InputRefused(
        f"`{name}` is given without `{labels_name}`: name its axes in the order of its shape, for example "
        f"{'coil,ky,kx' if name == 'kspace' else 'coil,y,x'}."
    )
