"""`fallow reconstruct` and `inspect`: their files, what they print, and what an interruption leaves behind."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest
from PIL import Image

from recon.caution import CAUTION
from recon.formats import read_image
from service.cli import main
from tests.cli.bad_scans import COLUMNS, ROWS, good, kspace, mask, write
from tests.processes import heed_interrupts

ROOT = Path(__file__).parents[2]
LONG = '{"tolerance": 1e-6, "max_iterations": 100000}'


def test_three_files_and_a_summary(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    good(tmp_path / "scan.h5")
    files = [str(tmp_path / name) for name in ("image.h5", "report.json", "image.png")]
    arguments = [
        "reconstruct",
        str(tmp_path / "scan.h5"),
        "-o",
        files[0],
        "--report",
        files[1],
        "--picture",
        files[2],
    ]
    assert main(arguments) == 0
    out, err = capsys.readouterr()
    assert out.splitlines()[-1] == CAUTION
    assert "compressed-sensing" in out
    assert "solve" in err
    result = read_image(files[0])
    assert result.image.shape == (ROWS, COLUMNS)
    assert result.provenance["scan_sha256"]
    assert result.provenance["duration_seconds"] > 0
    assert result.provenance["settings"] == result.report["settings"]
    report = json.loads(Path(files[1]).read_text())
    assert report == result.report
    with Image.open(files[2]) as picture:
        assert picture.info["Caution"] == CAUTION
    assert sorted(path.name for path in tmp_path.iterdir()) == [
        "image.h5",
        "image.png",
        "report.json",
        "scan.h5",
    ]


def test_json_is_the_whole_answer_and_an_old_image_is_replaced(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    good(tmp_path / "scan.h5")
    image = tmp_path / "image.h5"
    image.write_text("of an earlier run")
    (tmp_path / "settings.json").write_text('{"method": "zero-filled", "combination": "root-sum-of-squares"}')
    arguments = ["reconstruct", str(tmp_path / "scan.h5"), "-o", str(image), "--json"]
    assert main([*arguments, "--settings", str(tmp_path / "settings.json")]) == 0
    answer = json.loads(capsys.readouterr().out)
    assert answer["files"] == {"image": str(image)}
    assert answer["report"]["settings"]["method"] == "zero-filled"
    assert answer["report"]["caution"] == CAUTION
    with h5py.File(image) as file:
        assert file.attrs["layout"] == "fallow-image"


@pytest.mark.parametrize("method", ["zero-filled", "tikhonov", "compressed-sensing"])
@pytest.mark.parametrize("combination", ["sensitivity", "root-sum-of-squares"])
def test_summary_of_every_method(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], method: str, combination: str
) -> None:
    good(tmp_path / "scan.h5")
    (tmp_path / "settings.json").write_text(json.dumps({"method": method, "combination": combination}))
    arguments = ["reconstruct", str(tmp_path / "scan.h5"), "-o", str(tmp_path / "image.h5")]
    assert main([*arguments, "--settings", str(tmp_path / "settings.json")]) == 0
    assert method in capsys.readouterr().out


@pytest.mark.parametrize(("number", "code"), [(signal.SIGTERM, 143), (signal.SIGINT, 130)])
def test_interruption_leaves_nothing_behind(tmp_path: Path, number: signal.Signals, code: int) -> None:
    write(
        tmp_path / "scan.h5",
        samples=np.tile(kspace(), (50, 1, 1, 1)),
        axes="slice,coil,ky,kx",
        mask=(mask(), "ky"),
    )
    (tmp_path / "settings.json").write_text(LONG)
    files = [
        "-o",
        "image.h5",
        "--report",
        "report.json",
        "--picture",
        "image.png",
        "--settings",
        "settings.json",
    ]
    process = subprocess.Popen(
        [sys.executable, "-m", "service.cli", "reconstruct", "scan.h5", *files],
        cwd=tmp_path, env={**os.environ, "PYTHONPATH": str(ROOT)}, stderr=subprocess.PIPE, text=True,
        preexec_fn=heed_interrupts,
    )  # fmt: skip
    assert process.stderr is not None
    for line in process.stderr:
        if "solve" in line:
            break
    process.send_signal(number)
    said = process.stderr.read()
    process.stderr.close()
    assert process.wait(30) == code
    assert "Traceback" not in said
    assert sorted(path.name for path in tmp_path.iterdir()) == ["scan.h5", "settings.json"]


def outside_mask(path: Path) -> None:
    write(path, mask=(mask(), "ky"))


def sampled_zeros(path: Path) -> None:
    samples = kspace()
    samples[:, ~mask()] = 0
    samples[:, 0] = 0
    write(path, samples=samples, mask=(mask(), "ky"))


def along_readout(path: Path) -> None:
    varying = np.ones((ROWS, COLUMNS), dtype=bool)
    varying[:8, ::2] = False
    write(path, samples=np.where(varying, kspace(), 0), mask=(varying, "ky,kx"))


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (outside_mask, "outside the mask"),
        (sampled_zeros, "zeros"),
        (lambda path: write(path), "no /mask"),
        (lambda path: write(path), "no /noise"),
        (along_readout, "readout"),
    ],
    ids=["samples outside the mask", "sampled zeros", "no mask", "no noise", "mask along the readout"],
)
def test_inspect_tells_what_is_odd_and_accepts_it(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], make: object, words: str
) -> None:
    assert callable(make)
    make(tmp_path / "scan.h5")
    assert main(["inspect", str(tmp_path / "scan.h5")]) == 0
    out = capsys.readouterr().out
    assert words in out
    assert not [line for line in out.splitlines() if line != line.rstrip()]  # names without anything to say
    assert out.splitlines()[-1] == CAUTION
