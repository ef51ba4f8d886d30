"""The built wheel works elsewhere: complete, with the base dependencies alone, and with the server's."""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
import time
import zipfile
from collections.abc import Mapping
from pathlib import Path

import h5py
import httpx
import pytest
from PIL import Image

from recon.caution import CAUTION
from tests.processes import free_port, stop, waited_for

ROOT = Path(__file__).parents[2]
SCAN = ROOT / "sample_kspace" / "cut_fruit_undersampled.h5"

pytestmark = [pytest.mark.packaging, pytest.mark.slow]


def clean(**variables: str) -> dict[str, str]:
    """The environment of a process that must not find the source tree or the caller's service."""
    kept = {k: v for k, v in os.environ.items() if not k.startswith(("PYTHON", "FALLOW_", "VIRTUAL_ENV"))}
    return {**kept, **variables}


def run(
    *command: str | Path, cwd: Path, code: int = 0, variables: Mapping[str, str] | None = None
) -> subprocess.CompletedProcess[str]:
    """Run a command elsewhere; its exit code must be the one expected."""
    result = subprocess.run(
        [str(part) for part in command],
        cwd=cwd,
        env=clean(**(variables or {})),
        capture_output=True,
        text=True,
        timeout=400,
    )
    assert result.returncode == code, result.stdout + result.stderr
    return result


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("wheel")
    run(sys.executable, "-m", "build", "--wheel", "--no-isolation", "--outdir", folder, ROOT, cwd=folder)
    (found,) = folder.glob("fallow-*.whl")
    return found


def installed(folder: Path, requirement: str) -> Path:
    """A clean environment with one requirement, other packages at the locked versions; its folder of programs."""
    lock = (ROOT / "deploy" / "requirements-server.txt").read_text()
    pins = re.findall(r"^(\S+==\S+(?: ; [^\\]+)?)", lock, re.MULTILINE)
    (folder / "pins.txt").write_text("\n".join(pins))
    run(sys.executable, "-m", "venv", folder / "venv", cwd=folder)
    pip = folder / "venv" / "bin" / "python", "-m", "pip", "install", "--quiet", "--no-compile"
    run(*pip, "--only-binary", ":all:", "--constraint", folder / "pins.txt", requirement, cwd=folder)
    return folder / "venv" / "bin"


@pytest.fixture(scope="module")
def base(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return installed(tmp_path_factory.mktemp("base"), str(wheel))


@pytest.fixture(scope="module")
def server(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return installed(tmp_path_factory.mktemp("server"), f"{wheel}[server]")


def test_wheel_holds_every_file_of_both_packages(wheel: Path) -> None:
    held = {name for name in zipfile.ZipFile(wheel).namelist() if ".dist-info/" not in name}
    source = {
        path.relative_to(ROOT).as_posix()
        for package in ("recon", "service")
        for path in (ROOT / package).rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    }
    assert held == source
    assert {"recon/py.typed", "service/py.typed"} <= held
    assert any(name.startswith("service/store/migrations/versions/") for name in held)


def test_wheel_carries_licence_and_entry_point(wheel: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        names = archive.namelist()
        (metadata,) = (name for name in names if name.endswith(".dist-info/METADATA"))
        (entries,) = (name for name in names if name.endswith(".dist-info/entry_points.txt"))
        assert any(name.endswith("LICENSE") for name in names)
        assert "License-Expression: Apache-2.0" in archive.read(metadata).decode()
        assert "fallow = service.cli:main" in archive.read(entries).decode()


def test_base_install_reconstructs(base: Path, tmp_path: Path) -> None:
    home = run(base / "python", "-c", "import service; print(service.__file__)", cwd=tmp_path).stdout
    assert str(base.parent) in home
    assert "reconstruct" in run(base / "fallow", "--help", cwd=tmp_path).stdout
    files = "-o", "image.h5", "--report", "report.json", "--picture", "image.png"
    shown = run(base / "fallow", "reconstruct", SCAN, *files, cwd=tmp_path).stdout
    assert CAUTION in shown
    with h5py.File(tmp_path / "image.h5") as image:
        assert image.attrs["layout"] == "fallow-image"
        assert image["image"].shape[-2:] == (192, 192)
    assert json.loads((tmp_path / "report.json").read_text())["caution"] == CAUTION
    with Image.open(tmp_path / "image.png") as picture:
        assert picture.info["Caution"] == CAUTION


def test_base_install_says_what_serve_needs(base: Path, tmp_path: Path) -> None:
    said = run(base / "fallow", "serve", "--data", tmp_path / "data", cwd=tmp_path, code=2).stderr
    assert "fallow[server]" in said
    assert said.count("\n") == 1
    assert not (tmp_path / "data").exists()


def test_server_install_serves(server: Path, tmp_path: Path) -> None:
    port = str(free_port())
    address = {"FALLOW_URL": f"http://127.0.0.1:{port}", "FALLOW_DATA": str(tmp_path / "data")}
    command = [str(server / "fallow"), "serve", "--port", port]
    with (tmp_path / "log").open("wb") as log:
        service = subprocess.Popen(command, cwd=tmp_path, env=clean(**address), stdout=log, stderr=log)
    try:
        waited_for(f"{address['FALLOW_URL']}/health/ready", service, tmp_path / "log")
        done = run(server / "fallow", "submit", SCAN, "--wait", "--json", cwd=tmp_path, variables=address)
        job = json.loads(done.stdout)
        assert job["state"] == "successful"
        run(server / "fallow", "collect", job["id"], "-o", "results", cwd=tmp_path, variables=address)
        names = sorted(path.name for path in (tmp_path / "results").iterdir())
        assert names == ["image.h5", "image.png", "report.json"]
    finally:
        started = time.monotonic()
        stop(service)
    assert time.monotonic() - started < 15
    with pytest.raises(httpx.TransportError):
        httpx.get(f"{address['FALLOW_URL']}/health/live", trust_env=False)
