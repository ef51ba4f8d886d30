"""Opening HDF5 files that may be hostile: only plain datasets of the file itself are ever read.

Links that leave the file, external raw storage, virtual datasets and foreign filters are refused by name, since each
of them makes the reader open something that the sender chose.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np

from recon.axes import COMPLEX_AXIS, LabelledArray
from recon.errors import InvalidScan

#: gzip, shuffle, fletcher32, lzf: the filters that h5py itself carries.
ACCEPTED_FILTERS = {1: "gzip", 2: "shuffle", 3: "fletcher32", 32000: "lzf"}
LARGEST_DATASET_BYTES = 64 * 2**30
_LINKS = {h5py.ExternalLink: "an external link, into another file", h5py.SoftLink: "a soft link"}


def open_file(path: Path | str) -> h5py.File:
    """Open an HDF5 file for reading.

    Raises
    ------
    InvalidScan
        When it is missing, not HDF5, or truncated.
    """
    if not Path(path).is_file():
        raise InvalidScan(f"{Path(path).name}: no such file; give the path of an HDF5 scan file")
    try:
        return h5py.File(path, "r")
    except (OSError, RuntimeError) as error:
        kind = "truncated HDF5" if "truncated" in str(error) else "not HDF5 or damaged"
        raise InvalidScan(
            f"the file cannot be opened: {kind}; write it again and check that it is complete"
        ) from None


def dataset(file: h5py.File, name: str) -> h5py.Dataset | None:
    """Return a root dataset that lies in the file itself, None where there is none.

    Raises
    ------
    InvalidScan
        For links, external or virtual storage, foreign filters, and sizes beyond the limit.
    """
    try:
        link = file.get(name, getlink=True)
        if link is None:
            return None
        if not isinstance(link, h5py.HardLink):
            raise InvalidScan(
                f"/{name} is {_LINKS.get(type(link), 'a link')}; accepted are datasets stored in the file itself"
            )
        found = file[name]
        if not isinstance(found, h5py.Dataset):
            raise InvalidScan(f"/{name} is a {type(found).__name__.lower()}; accepted is a dataset")
        _refuse_foreign_storage(name, found)
    except (OSError, RuntimeError, KeyError) as error:
        raise InvalidScan(
            f"/{name} cannot be read: the file is damaged ({type(error).__name__}); write it again"
        ) from None
    return found


def _refuse_foreign_storage(name: str, found: h5py.Dataset) -> None:
    if found.is_virtual:
        raise InvalidScan(f"/{name} is a virtual dataset; accepted are datasets stored in the file itself")
    properties = found.id.get_create_plist()
    if properties.get_external_count() > 0:
        raise InvalidScan(
            f"/{name} is stored in another file; accepted are datasets stored in the file itself"
        )
    for position in range(properties.get_nfilters()):
        code = properties.get_filter(position)[0]
        if code not in ACCEPTED_FILTERS:
            accepted = ", ".join(ACCEPTED_FILTERS.values())
            raise InvalidScan(
                f"/{name} uses HDF5 filter {code}; accepted are {accepted}: write it with one of these"
            )
    if found.shape is None:
        raise InvalidScan(f"/{name} is an empty dataspace; write an array")
    declared = int(np.prod([int(n) for n in found.shape], dtype=object)) * found.dtype.itemsize
    if declared > LARGEST_DATASET_BYTES:
        raise InvalidScan(
            f"/{name} declares {declared} bytes; accepted are at most {LARGEST_DATASET_BYTES}: split the scan"
        )


def text(value: Any) -> str | None:
    """Return an HDF5 string attribute as str, whatever of the usual forms it was written in; None if not text."""
    if isinstance(value, np.ndarray) and value.size == 1:
        value = value.reshape(-1)[0]
    if isinstance(value, bytes):
        try:
            return value.decode("utf-8").rstrip("\x00")
        except UnicodeDecodeError:
            return None
    return str(value) if isinstance(value, str) else None


def labels(
    name: str, found: h5py.Dataset, accepted: tuple[str, ...], *, may_be_complex: bool = True
) -> tuple[str, ...]:
    """Axis labels of a dataset in storage (C) order, from any of the three accepted places.

    Dimension labels, the attribute `axes` (C order) and the attribute `axes_fastest_first` (column-major order)
    must agree where more than one is given.

    Raises
    ------
    InvalidScan
        When there are none, they disagree, or one is unknown.
    """
    sources: dict[str, tuple[str, ...]] = {}
    dimension = tuple(_dimension_labels(found))
    if any(dimension):
        sources["dimension labels"] = dimension
    for attribute, step in (("axes", 1), ("axes_fastest_first", -1)):
        if attribute in found.attrs:
            value = text(_attribute(name, found, attribute))
            if value is None:
                raise InvalidScan(
                    f'/{name}: the attribute {attribute} is not text; write it like "coil,ky,kx"'
                )
            sources[attribute] = tuple(part.strip() for part in value.split(","))[::step]
    hint = f'label them, for instance axes="{",".join(accepted[-3:])}" in C order, or axes_fastest_first'
    if not sources:
        raise InvalidScan(f"/{name} has unlabelled axes; {hint}")
    if len(set(sources.values())) > 1:
        said = "; ".join(f"{source} says {','.join(value)}" for source, value in sources.items())
        raise InvalidScan(
            f"/{name}: the axis labels disagree ({said}, all in C order); keep one or make them agree"
        )
    found_labels = next(iter(sources.values()))
    extra = (COMPLEX_AXIS,) if may_be_complex else ()
    _check_labels(name, found, found_labels, (*accepted, *extra))
    return found_labels


def _attribute(name: str, found: h5py.Dataset, attribute: str) -> Any:
    try:
        return found.attrs[attribute]
    except (OSError, RuntimeError, TypeError, ValueError):
        raise InvalidScan(
            f"/{name}: the attribute {attribute} cannot be read; write it as a plain value"
        ) from None


def _dimension_labels(found: h5py.Dataset) -> list[str]:
    try:
        return [str(dimension.label) for dimension in found.dims]
    except (OSError, RuntimeError, UnicodeDecodeError):
        return []


def _check_labels(name: str, found: h5py.Dataset, given: tuple[str, ...], accepted: tuple[str, ...]) -> None:
    if len(given) != len(found.shape):
        raise InvalidScan(
            f"/{name} has {len(found.shape)} dimensions but {len(given)} axis labels ({','.join(given)}); label each"
        )
    for label in given:
        if label not in accepted:
            shown = label or "(empty)"
            raise InvalidScan(f"/{name} has the unknown axis {shown}; accepted are {', '.join(accepted)}")
    if len(set(given)) != len(given):
        raise InvalidScan(f"/{name} names an axis twice ({','.join(given)}); each label may appear once")


def complex_array(file: h5py.File, name: str, accepted: tuple[str, ...]) -> LabelledArray | None:
    """Return a labelled complex dataset in any of the three encodings, None where there is none.

    Raises
    ------
    InvalidScan
        For other number types and malformed labels.
    """
    found = dataset(file, name)
    if found is None:
        return None
    given = labels(name, found, accepted)
    _check_encoding(name, found, given)
    return LabelledArray(found, given)


def _check_encoding(name: str, found: h5py.Dataset, given: tuple[str, ...]) -> None:
    kinds = (
        "native complex, a compound of (real, imag), or floats with one axis of length 2 labelled complex; "
        "single or double precision"
    )
    dtype = found.dtype
    parts = () if dtype.names is None else tuple(dtype.names)
    is_pair = parts in (("r", "i"), ("real", "imag")) and all(dtype[p].kind == "f" for p in parts)
    if COMPLEX_AXIS in given:
        length = found.shape[given.index(COMPLEX_AXIS)]
        if dtype.kind != "f" or length != 2:
            raise InvalidScan(
                f"/{name} has a complex axis of length {length} and type {dtype}; accepted are {kinds}"
            )
    elif not (dtype.kind == "c" or is_pair):
        raise InvalidScan(f"/{name} holds {dtype} numbers; accepted are {kinds}: convert before writing")
    widths = (
        {dtype[p].itemsize for p in parts} if is_pair else {dtype.itemsize // (2 if dtype.kind == "c" else 1)}
    )
    if not widths <= {4, 8}:
        raise InvalidScan(f"/{name} holds {dtype} numbers; accepted are {kinds}: convert before writing")


def mask_array(file: h5py.File, name: str, accepted: tuple[str, ...]) -> LabelledArray | None:
    """Return a labelled bool or uint8 dataset, None where there is none.

    Raises
    ------
    InvalidScan
        For other number types and malformed labels.
    """
    found = dataset(file, name)
    if found is None:
        return None
    if found.dtype != np.bool_ and found.dtype != np.uint8:
        raise InvalidScan(f"/{name} holds {found.dtype} numbers; accepted are bool or uint8, 1 where sampled")
    return LabelledArray(found, labels(name, found, accepted, may_be_complex=False))
