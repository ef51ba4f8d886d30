"""Client and command against the real service: API, queue, worker and computing child in processes of their own."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np
import pytest
from PIL import Image

from recon.caution import CAUTION
from service.cli import main
from service.client import Client, RequestRefused
from tests.cli.bad_scans import BAD_SCANS, good, kspace, mask, write
from tests.processes import free_port, stop, waited_for

ROOT = Path(__file__).parents[2]

pytestmark = pytest.mark.acceptance


@dataclass(frozen=True)
class Live:
    """A running service."""

    url: str
    data: Path
    token: str


@pytest.fixture(scope="module")
def live(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Live]:
    folder = tmp_path_factory.mktemp("live")
    port = free_port()
    command = [
        sys.executable,
        "-m",
        "service.cli",
        "serve",
        "--port",
        str(port),
        "--data",
        str(folder / "data"),
    ]
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    with (folder / "log").open("wb") as log:
        process = subprocess.Popen(command, cwd=folder, env=environment, stdout=log, stderr=log)
        try:
            waited_for(f"http://127.0.0.1:{port}/health/ready", process, folder / "log")
            token = (folder / "data" / "token").read_text().strip()
            yield Live(f"http://127.0.0.1:{port}", folder / "data", token)
        finally:
            stop(process)


@pytest.fixture
def client(live: Live) -> Iterator[Client]:
    with Client(live.url, live.token) as connected:
        yield connected


@pytest.fixture
def here(live: Live, monkeypatch: pytest.MonkeyPatch) -> Live:
    """Address and data folder in the environment, as a user on the same account has them."""
    monkeypatch.setenv("FALLOW_URL", live.url)
    monkeypatch.setenv("FALLOW_DATA", str(live.data))
    monkeypatch.delenv("FALLOW_TOKEN", raising=False)
    return live


def long_job_scan(path: Path) -> Path:
    """A scan that keeps a worker busy until its job is dismissed."""
    samples = np.tile(kspace(), (100, 1, 1, 1)) + np.arange(100).reshape(100, 1, 1, 1) * 1e-3
    write(path, samples=samples.astype(np.complex64), axes="slice,coil,ky,kx", mask=(mask(), "ky"))
    return path


LONG = {"tolerance": 1e-6, "max_iterations": 100_000}


def test_file_to_image(client: Client, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    good(tmp_path / "scan.h5")
    job = client.submit(tmp_path / "scan.h5", {"method": "tikhonov"}, label="pear").wait(
        progress=True, timeout=120
    )
    assert job.state == "successful"
    assert "successful" in capsys.readouterr().err
    assert job.facts["caution"] == CAUTION
    image = job.image()
    assert image.shape == (32, 24)
    assert image.dtype == np.complex64
    assert np.abs(image[16, 12]) > 5 * np.abs(image[0, 0])
    report = job.report()
    assert report["caution"] == CAUTION
    assert report["settings"]["method"] == "tikhonov"
    paths = job.save(tmp_path / "results")
    with h5py.File(paths[0]) as file:
        np.testing.assert_array_equal(file["image"][()], image)
    assert json.loads(paths[1].read_text()) == report
    with Image.open(paths[2]) as picture:
        assert picture.info["Caution"] == CAUTION


def test_arrays_give_the_image_of_the_same_file(client: Client, tmp_path: Path) -> None:
    samples = kspace()
    samples[:, ~mask()] = 0
    good(tmp_path / "scan.h5")
    from_file = client.submit(tmp_path / "scan.h5").wait(timeout=120).image()
    arrays = {"kspace": samples, "axes": "coil,ky,kx", "mask": mask(), "mask_axes": "ky"}
    np.testing.assert_array_equal(client.submit(arrays).wait(timeout=120).image(), from_file)


def test_image_is_that_of_the_command_without_a_service(
    client: Client, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Same scan, same settings, same version: the same bytes, whoever computes."""
    good(tmp_path / "scan.h5")
    remote = client.submit(tmp_path / "scan.h5").wait(timeout=120).image()
    assert main(["reconstruct", str(tmp_path / "scan.h5"), "-o", str(tmp_path / "image.h5")]) == 0
    with h5py.File(tmp_path / "image.h5") as file:
        np.testing.assert_array_equal(file["image"][()], remote)


def test_same_scan_twice_is_one_scan(client: Client, tmp_path: Path) -> None:
    good(tmp_path / "scan.h5")
    assert client.upload(tmp_path / "scan.h5")["id"] == client.upload(tmp_path / "scan.h5")["id"]


def test_jobs_are_found_by_label_and_id(client: Client, tmp_path: Path) -> None:
    good(tmp_path / "scan.h5")
    submitted = [client.submit(tmp_path / "scan.h5", label="a label").id for _ in range(3)]
    assert [job.id for job in client.jobs(label="a label")] == submitted[::-1]
    assert client.job(submitted[0]).facts["label"] == "a label"
    for identifier in submitted:
        client.job(identifier).wait(timeout=120)
    assert {job.id for job in client.jobs(label="a label", state="successful")} == set(submitted)


def test_dismissed_job_ends_soon(client: Client, tmp_path: Path) -> None:
    job = client.submit(long_job_scan(tmp_path / "scan.h5"), LONG)
    while job.refresh().state == "accepted":
        time.sleep(0.05)
    started = time.monotonic()
    assert job.dismiss().id == job.id
    while not job.refresh().is_finished:
        time.sleep(0.05)
    assert job.state == "dismissed"
    assert time.monotonic() - started < 5


def test_finished_job_can_be_deleted(client: Client, tmp_path: Path) -> None:
    good(tmp_path / "scan.h5")
    job = client.submit(tmp_path / "scan.h5", {"method": "zero-filled"}).wait(timeout=120)
    job.delete()
    with pytest.raises(RequestRefused) as caught:
        job.refresh()
    assert caught.value.status == 404


def test_refused_settings_name_the_member(client: Client, tmp_path: Path) -> None:
    good(tmp_path / "scan.h5")
    with pytest.raises(RequestRefused) as caught:
        client.submit(tmp_path / "scan.h5", {"tolerance": 7})
    assert caught.value.status == 422
    assert [error["pointer"] for error in caught.value.problem["errors"]] == ["/settings/tolerance"]
    assert "tolerance" in str(caught.value)


def test_command_from_file_to_results(here: Live, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    good(tmp_path / "scan.h5")
    (tmp_path / "settings.json").write_text('{"method": "zero-filled"}')
    arguments = ["submit", str(tmp_path / "scan.h5"), "--settings", str(tmp_path / "settings.json")]
    assert main([*arguments, "--label", "plum", "--wait", "--json"]) == 0
    job = json.loads(capsys.readouterr().out)
    assert (job["state"], job["label"]) == ("successful", "plum")
    assert main(["job", job["id"]]) == 0
    shown = capsys.readouterr().out
    assert "successful" in shown
    assert shown.splitlines()[-1] == CAUTION
    assert main(["jobs", "--label", "plum"]) == 0
    assert job["id"] in capsys.readouterr().out
    assert main(["collect", job["id"], "-o", str(tmp_path / "results")]) == 0
    *paths, caution = capsys.readouterr().out.splitlines()
    assert [Path(path).name for path in paths] == ["image.h5", "report.json", "image.png"]
    assert all(Path(path).is_file() for path in paths)
    assert caution == CAUTION


def test_command_on_an_unfinished_job(here: Live, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "settings.json").write_text(json.dumps(LONG))
    scan = long_job_scan(tmp_path / "scan.h5")
    assert main(["submit", str(scan), "--settings", str(tmp_path / "settings.json"), "--json"]) == 0
    job = json.loads(capsys.readouterr().out)
    assert main(["collect", job["id"], "-o", str(tmp_path / "results")]) == 2
    assert not (tmp_path / "results").exists()
    capsys.readouterr()
    assert main(["dismiss", job["id"], "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["id"] == job["id"]


@pytest.mark.parametrize("name", ["not HDF5", "empty", "unknown axis", "NaN", "no calibration region"])
def test_bad_scan_is_exit_code_2(
    here: Live, tmp_path: Path, capsys: pytest.CaptureFixture[str], name: str
) -> None:
    make, word = BAD_SCANS[name]
    make(tmp_path / "scan.h5")
    assert main(["submit", str(tmp_path / "scan.h5")]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert word.casefold() in err.casefold()


@pytest.mark.parametrize(
    "arguments", [["job", "nothing"], ["collect", "nothing", "-o", "x"], ["dismiss", "nothing"]]
)
def test_unknown_job_is_exit_code_2(
    here: Live,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    arguments: list[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(arguments) == 2
    assert "nothing" in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == []


def test_wrong_token_is_exit_code_2(here: Live, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["jobs", "--token", "wrong"]) == 2
    assert "--token" in capsys.readouterr().err


def test_port_taken_is_exit_code_2(here: Live, tmp_path: Path) -> None:
    port = here.url.rpartition(":")[2]
    command = [
        sys.executable,
        "-m",
        "service.cli",
        "serve",
        "--port",
        port,
        "--data",
        str(tmp_path / "other"),
    ]
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    result = subprocess.run(command, env=environment, capture_output=True, text=True, timeout=60)
    assert result.returncode == 2, result.stderr
    assert "--port" in result.stderr.splitlines()[-1]
