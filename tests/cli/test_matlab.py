"""The MATLAB example of the README, carried out call by call with h5py, gives a scan that is read back unchanged."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from recon.formats import open_scan
from recon.scan import PlaneIndex
from tests.cli.bad_scans import kspace, mask
from tests.readme import blocks


def column_major(values: np.ndarray[Any, Any]) -> np.ndarray[Any, Any]:
    """An array as MATLAB stores it: its first axis runs fastest, so HDF5 sees the axes reversed."""
    return np.ascontiguousarray(values.transpose())


def carry_out(
    script: str, path: Path, variables: dict[str, np.ndarray[Any, Any]], row: tuple[int, ...]
) -> int:
    """Do what the calls of the script do to a file; `row` is the shape that a row vector of three gets.

    Returns
    -------
    int
        Number of calls.
    """
    body = script.split("function", maxsplit=1)[0]
    calls = 0
    with h5py.File(path, "w") as file:
        for name, axes, variable in re.findall(
            r"^write\(file, '(\S+)', '(\S+)', (\w+)\)", body, re.MULTILINE
        ):
            values = variables[variable]
            parts = np.stack([values.real, values.imag]).astype(np.float32)
            file.create_dataset(name, data=column_major(parts))
            file[name].attrs["axes_fastest_first"] = np.bytes_("complex," + axes)
            calls += 1
        for name, variable in re.findall(
            r"^h5write\(file, '(\S+)', uint8\((\w+)\(:\)\)\)", body, re.MULTILINE
        ):
            file.create_dataset(name, data=variables[variable].astype(np.uint8))
            calls += 1
        for name, key, value in re.findall(
            r"^h5writeatt\(file, '(\S+)', '(\w+)', (.+)\);", body, re.MULTILINE
        ):
            if value.startswith("'"):
                file[name].attrs[key] = np.bytes_(value.strip("'"))
            elif value.startswith("["):
                file[name].attrs[key] = np.array(value.strip("[]").split(), dtype=np.float64).reshape(row)
            else:
                file[name].attrs[key] = np.array([float(value)])
            calls += 1
    return calls


@pytest.mark.parametrize("row", [(3,), (3, 1)])
def test_scan_written_by_the_matlab_example(tmp_path: Path, row: tuple[int, ...]) -> None:
    ((_, script),) = blocks("matlab", section="Scan file")
    samples = kspace()
    samples[:, ~mask()] = 0
    noise = kspace()[:, :10, :10].reshape(4, 100)
    variables = {"kspace": samples.transpose(2, 1, 0), "noise": noise.transpose(), "mask": mask()}
    assert carry_out(script, tmp_path / "scan.h5", variables, row) == 7
    with open_scan(tmp_path / "scan.h5") as scan:
        assert scan.axes == {"coil": 4, "ky": 32, "kx": 24}
        np.testing.assert_array_equal(scan.kspace(PlaneIndex()), samples)
        np.testing.assert_array_equal(scan.mask(PlaneIndex())[:, 0], mask())
        np.testing.assert_array_equal(scan.noise(), noise)
        assert list(scan.attributes["field_of_view_mm"]) == [96.0, 96.0, 4.0]


def test_every_call_of_the_example_is_known() -> None:
    """So that a change of the example cannot slip past the test above."""
    ((_, script),) = blocks("matlab", section="Scan file")
    body = script.split("function", maxsplit=1)[0]
    called = set(re.findall(r"^(\w+)\(", body, re.MULTILINE))
    assert called == {"write", "h5create", "h5write", "h5writeatt", "system"}
