"""How the command behaves whatever it is asked to do: start-up, exit codes, one line per error."""

from __future__ import annotations

import errno
import json
import subprocess
import sys
from pathlib import Path

import pytest

from recon.errors import InvalidScan
from service.cli import build_parser, main
from service.client import (
    DamagedDownload,
    FallowError,
    JobFailed,
    RequestRefused,
    ServiceFault,
    ServiceUnreachable,
)
from service.commands import local, remote, serving
from service.commands.failures import Refused, explain
from service.commands.output import read_settings
from service.settings import SettingError
from tests.client.scripted import answer, refusal, scripted

ROOT = Path(__file__).parents[2]
JOB = {
    "id": "j1", "kind": "reconstruction", "label": "pear", "scan": "s1", "state": "running", "stage": "solve",
    "progress": 0.25, "created_at": "2026-01-02T03:04:05Z", "error": None, "caution": "Not for diagnosis.",
}  # fmt: skip
NAMES = {"serve", "worker", "reconstruct", "inspect", "submit", "jobs", "job", "collect", "dismiss"}


def test_commands_are_those_of_the_documentation() -> None:
    (commands,) = (action for action in build_parser()._actions if action.dest == "command")
    assert set(commands.choices or ()) == NAMES
    assert {group.__name__ for group in (local, remote, serving)} == {
        "service.commands.local", "service.commands.remote", "service.commands.serving",
    }  # fmt: skip


def test_reading_arguments_loads_nothing_heavy() -> None:
    code = (
        "import sys\nfrom service.cli import build_parser\nbuild_parser().parse_args(['jobs'])\n"
        "print(sorted({'numpy', 'h5py', 'scipy', 'pydantic', 'httpx', 'fastapi', 'PIL', 'dbos'} & set(sys.modules)))"
    )
    out = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True
    ).stdout
    assert out == "[]\n"


def test_commands_for_a_service_load_no_numerics() -> None:
    code = (
        "import sys\nfrom service.cli import main\ncode = main(['jobs', '--url', sys.argv[1], '--token', 't'])\n"
        "print(code, sorted({'numpy', 'h5py', 'scipy', 'pydantic', 'fastapi', 'PIL'} & set(sys.modules)))"
    )
    with scripted(answer({"items": [], "next": None})) as service:
        out = subprocess.run(
            [sys.executable, "-c", code, service.url], cwd=ROOT, capture_output=True, text=True, check=True
        ).stdout
    assert out == "no jobs\n0 []\n"


@pytest.mark.parametrize(
    ("error", "code", "words"),
    [
        (Refused("no such thing."), 2, "no such thing."),
        (InvalidScan("kspace is\nmissing"), 2, "kspace is missing"),
        (SettingError("FALLOW_UPLOAD_LIMIT is 'x'"), 2, "FALLOW_UPLOAD_LIMIT"),
        (RequestRefused({"status": 422, "detail": "bad"}), 2, "bad"),
        (RequestRefused({"status": 401, "detail": "No token."}), 2, "FALLOW_TOKEN"),
        (ServiceFault({"status": 500, "detail": "fault"}), 1, "fault"),
        (ServiceUnreachable("gone"), 4, "gone"),
        (JobFailed("j1", "dismissed", None), 3, "was dismissed"),
        (DamagedDownload("damaged"), 1, "damaged"),
        (FallowError("odd"), 1, "odd"),
        (PermissionError(errno.EACCES, "Permission denied", "/x"), 2, "/x"),
        (OSError(errno.ENOSPC, "No space left on device", "/x"), 1, "No space left on device"),
        (MemoryError(), 1, "memory"),
        (ZeroDivisionError("a\nb"), 1, "internal error (ZeroDivisionError: a b)"),
        (KeyboardInterrupt(), 130, "interrupted"),
    ],
)
def test_every_error_is_one_line_and_a_code(error: BaseException, code: int, words: str) -> None:
    line, found = explain(error)
    assert found == code
    assert words in line
    assert "\n" not in line


def test_traceback_on_request(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(ServiceUnreachable):
        main(["--traceback", "jobs", "--url", "http://127.0.0.1:9", "--token", "t"])


def test_job_is_shown_with_the_caution(capsys: pytest.CaptureFixture[str]) -> None:
    with scripted(answer(JOB)) as service:
        assert main(["job", "j1", "--url", service.url, "--token", "t"]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].split() == ["job", "j1"]
    assert "progress  25 %" in lines
    assert lines[-1] == "Not for diagnosis."


def test_job_as_json_is_what_the_service_said(capsys: pytest.CaptureFixture[str]) -> None:
    with scripted(answer(JOB)) as service:
        assert main(["job", "j1", "--url", service.url, "--token", "t", "--json"]) == 0
    assert json.loads(capsys.readouterr().out) == JOB


def test_jobs_are_listed_up_to_the_limit(capsys: pytest.CaptureFixture[str]) -> None:
    page = answer({"items": [JOB, {**JOB, "id": "j2"}, {**JOB, "id": "j3"}], "next": "more"})
    with scripted(page) as service:
        assert main(["jobs", "--limit", "2", "--url", service.url, "--token", "t"]) == 0
    head, *rows, caution = capsys.readouterr().out.splitlines()
    assert head.split() == ["id", "state", "done", "label", "created"]
    assert [row.split()[0] for row in rows] == ["j1", "j2"]
    assert caution == JOB["caution"]


def test_waiting_for_a_job_that_fails_is_exit_code_3(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "scan.h5").write_bytes(b"scan")
    failed = {
        **JOB,
        "state": "failed",
        "error": {"title": "t", "detail": "The computing process died twice."},
    }
    with scripted(answer({"id": "s1"}, 201), answer(JOB, 202), answer(failed)) as service:
        arguments = ["submit", str(tmp_path / "scan.h5"), "--wait", "--url", service.url, "--token", "t"]
        assert main(arguments) == 3
    assert capsys.readouterr().err.splitlines()[-1] == (
        "fallow submit: Job j1 failed: The computing process died twice."
    )


def test_refused_token_names_the_remedy(capsys: pytest.CaptureFixture[str]) -> None:
    with scripted(refusal(401, "The token is unknown.")) as service:
        assert main(["jobs", "--url", service.url, "--token", "t"]) == 2
    assert "give a token with --token" in capsys.readouterr().err


def test_reader_that_went_away_is_no_error_message() -> None:
    code = (
        "import sys\nfrom service.cli import main\n"
        "sys.exit(main(['jobs', '--limit', '5000', '--url', sys.argv[1], '--token', 't']))"
    )
    rows = [{**JOB, "id": f"j{number}"} for number in range(5000)]
    with scripted(answer({"items": rows, "next": None})) as service:
        process = subprocess.Popen(
            [sys.executable, "-c", code, service.url], cwd=ROOT,
            stdout=subprocess.PIPE, stderr=subprocess.PIPE,
        )  # fmt: skip
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        said = process.stderr.read()
        process.stderr.close()
        assert process.wait(20) != 0
    assert said == b""


@pytest.mark.parametrize(
    ("text", "words"), [("{", "not JSON"), ("3", "JSON int"), ("[" * 100_000, "not JSON")]
)
def test_settings_file_must_hold_an_object(tmp_path: Path, text: str, words: str) -> None:
    (tmp_path / "settings.json").write_text(text)
    with pytest.raises(Refused, match=words):
        read_settings(tmp_path / "settings.json")
