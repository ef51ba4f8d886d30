"""What is refused on the command line: exit code 2, one clear sentence, and no file left behind."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from service.cli import main
from tests.cli.bad_scans import BAD_SCANS, good
from tests.client.scripted import answer, scripted


def refused(capsys: pytest.CaptureFixture[str], *arguments: str | Path) -> str:
    """Run a command that must be refused; return the sentence."""
    code = main([str(argument) for argument in arguments])
    out, err = capsys.readouterr()
    assert code == 2, err
    assert out == ""
    assert "Traceback" not in err
    line = err.splitlines()[-1]
    assert line.startswith(f"fallow {arguments[0]}: ")
    return line


@pytest.mark.parametrize("name", BAD_SCANS)
def test_reconstruct_refuses_and_leaves_nothing_behind(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], name: str
) -> None:
    write, word = BAD_SCANS[name]
    write(tmp_path / "scan.h5")
    (tmp_path / "image.h5").write_text("of an earlier run")
    files = "-o", tmp_path / "image.h5", "--report", tmp_path / "r.json", "--picture", tmp_path / "p.png"
    line = refused(capsys, "reconstruct", tmp_path / "scan.h5", *files)
    assert word in line
    assert sorted(path.name for path in tmp_path.iterdir()) == ["image.h5", "scan.h5"]
    assert (tmp_path / "image.h5").read_text() == "of an earlier run"


@pytest.mark.parametrize("name", [name for name in BAD_SCANS if name != "no calibration region"])
def test_inspect_refuses(tmp_path: Path, capsys: pytest.CaptureFixture[str], name: str) -> None:
    write, word = BAD_SCANS[name]
    write(tmp_path / "scan.h5")
    assert word in refused(capsys, "inspect", tmp_path / "scan.h5")


@pytest.mark.parametrize(
    ("settings", "word"),
    [
        ('{"wavelet_strength": -1}', "wavelet_strength"),
        ('{"tolerance": 2}', "tolerance"),
        ('{"max_iterations": 0}', "max_iterations"),
        ('{"wavelet": "db99"}', "wavelet"),
        ('{"method": "magic"}', "method"),
        ('{"sharpness": 1}', "sharpness"),
        ('{"coil_maps": "supplied"}', "sensitivity"),
        ("[1]", "list"),
        ("{", "not JSON"),
    ],
)
def test_settings_are_refused(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], settings: str, word: str
) -> None:
    good(tmp_path / "scan.h5")
    (tmp_path / "settings.json").write_text(settings)
    arguments = tmp_path / "scan.h5", "-o", tmp_path / "image.h5", "--settings", tmp_path / "settings.json"
    assert word in refused(capsys, "reconstruct", *arguments)
    assert not (tmp_path / "image.h5").exists()


def test_files_that_cannot_be_used(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    good(tmp_path / "scan.h5")
    scan, image = tmp_path / "scan.h5", tmp_path / "image.h5"
    assert "no scan file" in refused(capsys, "reconstruct", tmp_path / "none.h5", "-o", image)
    assert "no scan file" in refused(capsys, "inspect", tmp_path)
    assert "name of its own" in refused(capsys, "reconstruct", scan, "-o", scan)
    assert "name of its own" in refused(capsys, "reconstruct", scan, "-o", image, "--report", image)
    assert "is a folder" in refused(capsys, "reconstruct", scan, "-o", tmp_path)
    assert "no folder" in refused(capsys, "reconstruct", scan, "-o", tmp_path / "none" / "image.h5")
    missing = tmp_path / "none.json"
    assert "cannot read" in refused(capsys, "reconstruct", scan, "-o", image, "--settings", missing)
    assert "No scan file" in refused(capsys, "submit", tmp_path / "none.h5", "--url", "http://127.0.0.1:9")
    assert sorted(path.name for path in tmp_path.iterdir()) == ["scan.h5"]


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        ([], "COMMAND"),
        (["paint"], "paint"),
        (["reconstruct", "scan.h5"], "--output"),
        (["jobs", "--state", "lost"], "lost"),
        (["jobs", "--limit", "0"], "at least 1"),
        (["serve", "--port", "70000"], "1 to 65535"),
        (["serve", "--workers", "-1"], "expected"),
        (["submit", "scan.h5", "--priority", "now"], "now"),
    ],
)
def test_wrong_usage_is_one_line(capsys: pytest.CaptureFixture[str], arguments: list[str], word: str) -> None:
    with pytest.raises(SystemExit) as caught:
        main(arguments)
    assert caught.value.code == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert word in err
    assert "--help" in err


def test_address_of_no_service(capsys: pytest.CaptureFixture[str]) -> None:
    assert "no address of a service" in refused(capsys, "jobs", "--url", "lab")


def test_unreachable_service_is_exit_code_4(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["jobs", "--url", "http://127.0.0.1:9", "--token", "t"]) == 4
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert "fallow serve" in err


def test_good_scan_is_inspected(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The scan that the bad ones depart from is accepted, so that each is refused for its own fault."""
    good(tmp_path / "scan.h5")
    assert main(["inspect", str(tmp_path / "scan.h5"), "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["axes"] == {"coil": 4, "ky": 32, "kx": 24}


@pytest.mark.parametrize("token", ["gr\u00fcn", "two\nlines", "a b"])
def test_token_that_cannot_be_sent(capsys: pytest.CaptureFixture[str], token: str) -> None:
    assert "token" in refused(capsys, "jobs", "--url", "http://127.0.0.1:9", "--token", token)


@pytest.mark.parametrize("label", ["", "a\nb", "x" * 201])
def test_label_is_refused_before_anything_is_sent(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], label: str
) -> None:
    good(tmp_path / "scan.h5")
    with scripted() as service:
        arguments = "--url", service.url, "--token", "t", "--label", label
        assert "label" in refused(capsys, "submit", tmp_path / "scan.h5", *arguments)
    assert service.received == []


def test_settings_are_refused_before_anything_is_sent(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    good(tmp_path / "scan.h5")
    (tmp_path / "settings.json").write_text('{"tolerance": 2}')
    with scripted() as service:
        arguments = "--url", service.url, "--token", "t", "--settings", tmp_path / "settings.json"
        assert "tolerance" in refused(capsys, "submit", tmp_path / "scan.h5", *arguments)
    assert service.received == []


@pytest.mark.parametrize("state", ["failed", "dismissed"])
def test_job_without_results_is_exit_code_3(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], state: str
) -> None:
    error = {"title": "t", "detail": "The worker died."} if state == "failed" else None
    job = {"id": "j1", "state": state, "progress": 0.5, "caution": "c", "error": error}
    with scripted(answer(job)) as service:
        arguments = ["--url", service.url, "--token", "t", "-o", str(tmp_path / "out")]
        assert main(["collect", "j1", *arguments]) == 3
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert state in err
    assert not (tmp_path / "out").exists()
