"""A fresh checkout: the README's tour as written, the quickstart alone, and what is said without a Python."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import time
from pathlib import Path

import h5py
import pytest
from PIL import Image

from recon.caution import CAUTION
from tests.processes import heed_interrupts
from tests.readme import ROOT, blocks


def environment() -> dict[str, str]:
    """That of a person who has cloned the project and nothing else."""
    return {k: v for k, v in os.environ.items() if not k.startswith(("PYTHON", "FALLOW_", "VIRTUAL_ENV"))}


@pytest.fixture(scope="module")
def checkout(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The files that version control knows, elsewhere."""
    folder = tmp_path_factory.mktemp("clone") / "a checkout"
    listed = subprocess.run(
        ["git", "ls-files", "-z", "--cached", "--others", "--exclude-standard"],
        cwd=ROOT, capture_output=True, text=True, check=True,
    ).stdout  # fmt: skip
    for name in filter(None, listed.split("\0")):
        if (ROOT / name).is_file():
            (folder / name).parent.mkdir(parents=True, exist_ok=True)
            shutil.copy2(ROOT / name, folder / name)
    return folder


def left_running(checkout: Path) -> list[str]:
    """Command lines of processes that belong to a checkout."""
    found = []
    for entry in Path("/proc").glob("[0-9]*/cmdline"):
        try:
            command = entry.read_bytes().replace(b"\0", b" ").decode(errors="replace")
        except OSError:
            continue
        if str(checkout) in command:
            found.append(command)
    return found


def gone_soon(checkout: Path, seconds: float = 15.0) -> list[str]:
    """What still runs after some seconds."""
    deadline = time.monotonic() + seconds
    while (left := left_running(checkout)) and time.monotonic() < deadline:
        time.sleep(0.1)
    return left


@pytest.mark.acceptance
@pytest.mark.packaging
@pytest.mark.slow
def test_tour_of_the_readme_works_as_written(checkout: Path) -> None:
    lines = ["set -euo pipefail"]
    for language, block in blocks("", section="Five-minute tour"):
        lines.append(block if language == "sh" else f"python - <<'END_OF_BLOCK'\n{block}END_OF_BLOCK")
    result = subprocess.run(
        ["bash", "-c", "\n".join(lines)],
        cwd=checkout, env=environment(), capture_output=True, text=True, timeout=500,
    )  # fmt: skip
    assert result.returncode == 0, result.stdout + result.stderr
    tour = checkout / "tour"
    assert json.loads((tour / "curl" / "report").read_text())["caution"] == CAUTION
    assert json.loads((tour / "local.json").read_text())["caution"] == CAUTION
    for image in (
        tour / "curl" / "image.h5",
        tour / "python" / "image.h5",
        tour / "command" / "image.h5",
        tour / "local.h5",
    ):
        with h5py.File(image) as file:
            assert file.attrs["caution"] == CAUTION
            assert file["image"].shape[-2:] == (192, 192)
    for picture in (tour / "curl" / "image.png", tour / "command" / "image.png", tour / "local.png"):
        with Image.open(picture) as opened:
            assert opened.info["Caution"] == CAUTION
    assert gone_soon(checkout) == []


@pytest.mark.acceptance
@pytest.mark.packaging
@pytest.mark.slow
def test_quickstart_ends_with_files_and_nothing_running(checkout: Path) -> None:
    result = subprocess.run(
        ["deploy/quickstart.sh"], cwd=checkout, env=environment(), capture_output=True, text=True, timeout=500
    )
    assert result.returncode == 0, result.stdout + result.stderr
    results = checkout / "quickstart-files" / "results"
    for name in ("image.h5", "report.json", "image.png"):
        assert str(results / name) in result.stdout
        assert (results / name).stat().st_size > 0
    assert CAUTION in result.stdout
    assert "Done in" in result.stdout
    assert "%" in result.stderr
    assert gone_soon(checkout, 2.0) == []
    assert not (checkout / "quickstart-files" / "service.pid").exists()


@pytest.mark.acceptance
@pytest.mark.packaging
@pytest.mark.slow
def test_quickstart_interrupted_leaves_nothing_running(checkout: Path) -> None:
    process = subprocess.Popen(
        ["deploy/quickstart.sh"], cwd=checkout, env=environment(), stdout=subprocess.PIPE, stderr=subprocess.STDOUT,
        text=True, start_new_session=True, preexec_fn=heed_interrupts,
    )  # fmt: skip
    assert process.stdout is not None
    for line in process.stdout:
        if line.startswith("Sending"):
            break
    os.killpg(process.pid, signal.SIGINT)
    process.stdout.read()
    process.stdout.close()
    assert process.wait(30) == 130
    assert gone_soon(checkout, 2.0) == []


def test_quickstart_says_when_there_is_no_python(tmp_path: Path) -> None:
    script = "source deploy/python.sh && find_python"
    result = subprocess.run(
        ["/bin/bash", "-c", script],
        cwd=ROOT, env={"PATH": str(tmp_path), "HOME": str(tmp_path)}, capture_output=True, text=True, timeout=20,
    )  # fmt: skip
    assert result.returncode == 1
    assert "needs Python 3.11, 3.12, 3.13 or 3.14" in result.stderr
    assert result.stdout == ""


def test_python_that_is_too_old_is_passed_over(tmp_path: Path) -> None:
    old = tmp_path / "python3"
    old.write_text("#!/bin/sh\nexit 1\n")
    old.chmod(0o755)
    result = subprocess.run(
        ["/bin/bash", "-c", "source deploy/python.sh && find_python"],
        cwd=ROOT, env={"PATH": str(tmp_path), "HOME": str(tmp_path), "FALLOW_PYTHON": str(old)},
        capture_output=True, text=True, timeout=20,
    )  # fmt: skip
    assert result.returncode == 1
    assert f"FALLOW_PYTHON={old}" in result.stderr


def test_quickstart_refuses_unknown_arguments() -> None:
    result = subprocess.run(
        ["deploy/quickstart.sh", "--forever"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=20,
        check=False,
    )
    assert result.returncode == 2
    assert "--keep" in result.stderr


def test_locks_name_no_place_and_pin_everything() -> None:
    """Exact versions with hashes, and no address of an index in any of them."""
    for lock in (ROOT / "deploy").glob("requirements-*.txt"):
        text = lock.read_text()
        assert "://" not in text
        for line in text.splitlines():
            if line and not line.startswith(("#", "    ")):
                assert "==" in line, f"{lock.name}: {line}"
                assert line.endswith("\\"), f"{lock.name}: {line}"
