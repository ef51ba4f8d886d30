"""The gate: files are examined under limits, and whatever happens to the process that does it is a refusal."""

from __future__ import annotations

import asyncio
import os
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from recon.formats import write_scan
from service.errors import ScanRefused
from service.gate import Gate
from service.settings import ServiceSettings

from .conftest import scan_content


@pytest.fixture
def settings(tmp_path: Path) -> ServiceSettings:
    """Settings of an empty folder."""
    return ServiceSettings(data=tmp_path)


@pytest.fixture
def upload(tmp_path: Path) -> Path:
    """A good scan of 16 MB."""
    noise = np.random.default_rng(3)
    samples = noise.normal(size=(8, 4, 256, 256)) + 1j * noise.normal(size=(8, 4, 256, 256))
    path = tmp_path / "scan.h5"
    write_scan(path, samples.astype(np.complex64), ("slice", "coil", "ky", "kx"))
    return path


def examine(gate: Gate, upload: Path) -> dict[str, Any]:
    """Pass one file through the gate."""
    return asyncio.run(gate.examine(upload, upload.with_suffix(".png")))


def stand_in(monkeypatch: pytest.MonkeyPatch, folder: Path, program: str) -> str:
    """Put a module in the place of the process behind the gate; its name."""
    (folder / "stand_in_gate.py").write_text(program)
    paths = [str(folder), os.environ.get("PYTHONPATH", ""), *sys.path]
    monkeypatch.setenv("PYTHONPATH", os.pathsep.join(path for path in paths if path))
    return "stand_in_gate"


def test_good_file_passes(settings: ServiceSettings, upload: Path) -> None:
    found = examine(Gate(settings), upload)
    assert found["facts"]["axes"] == {"slice": 8, "coil": 4, "ky": 256, "kx": 256}
    assert upload.with_suffix(".png").read_bytes().startswith(b"\x89PNG")


def test_memory_is_limited(settings: ServiceSettings, tmp_path: Path) -> None:
    """A file of a few kB that unpacks to a plane of 512 MB."""
    import h5py

    path = tmp_path / "bomb.h5"
    with h5py.File(path, "w") as file:
        file.attrs["layout"], file.attrs["layout_version"] = "fallow-scan", 1
        file.create_dataset(
            "kspace", (1, 8192, 8192), np.complex64, chunks=(1, 1024, 1024), compression="gzip"
        )
        file["kspace"].attrs["axes"] = "coil,ky,kx"
    with pytest.raises(ScanRefused, match=r"memory|limits"):
        examine(Gate(replace(settings, gate_memory=600 << 20)), path)


def test_processor_time_is_limited(settings: ServiceSettings, upload: Path) -> None:
    limits = replace(settings, gate_seconds=1.0, gate_seconds_per_gib=0.0)
    endless = """
import sys
from service.process import limit
limit(memory=1 << 31, seconds=int(sys.argv[5]), file_bytes=1, files=9)
while True: pass
"""
    with pytest.MonkeyPatch.context() as patch:
        module = stand_in(patch, upload.parent, endless)
        with pytest.raises(ScanRefused, match="more than 1 s of processor time"):
            examine(Gate(limits, module=module), upload)


def test_sleeping_process_is_given_up(
    settings: ServiceSettings, upload: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    module = stand_in(monkeypatch, upload.parent, "import time\ntime.sleep(60)\n")
    limits = replace(settings, gate_seconds=0.1, gate_seconds_per_gib=0.0)
    with pytest.raises(ScanRefused, match="longer than"):
        examine(Gate(limits, module=module), upload)


@pytest.mark.parametrize(
    "program",
    [
        "import os\nos.abort()\n",
        "raise SystemExit(3)\n",
        "print('nonsense')\n",
        "print('{}')\n",
        "print('null')\n",
    ],
    ids=["crash", "exit", "nonsense", "empty", "null"],
)
def test_odd_end_is_a_refusal(
    settings: ServiceSettings, upload: Path, monkeypatch: pytest.MonkeyPatch, program: str
) -> None:
    module = stand_in(monkeypatch, upload.parent, program)
    with pytest.raises(ScanRefused, match="ended by"):
        examine(Gate(settings, module=module), upload)


def test_links_to_other_files_are_refused(settings: ServiceSettings, tmp_path: Path) -> None:
    import h5py

    scan_content(tmp_path / "secret.h5")
    path = tmp_path / "link.h5"
    with h5py.File(path, "w") as file:
        file.attrs["layout"], file.attrs["layout_version"] = "fallow-scan", 1
        file["kspace"] = h5py.ExternalLink(str(tmp_path / "secret.h5"), "/kspace")
    with pytest.raises(ScanRefused, match="an external link"):
        examine(Gate(settings), path)
    assert not path.with_suffix(".png").exists()
