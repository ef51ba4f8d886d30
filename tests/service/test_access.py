"""Who is let in, under which host name, and how faults are answered."""

from __future__ import annotations

import os
import stat
import threading
from pathlib import Path

import httpx
import pytest

from service.errors import Unauthorised
from service.settings import ServiceSettings, SettingError
from service.tokens import Tokens, owner_token

from .conftest import Caller, running

PATHS = ["/v1/scans", "/v1/jobs", "/v1/jobs/x/events", "/openapi.json", "/nowhere"]


@pytest.mark.parametrize("path", PATHS)
@pytest.mark.parametrize("authorization", [None, "Bearer wrong", "Basic b3duZXI6", "Bearer"])
def test_caller_without_the_token_stays_out(shared: Caller, path: str, authorization: str | None) -> None:
    headers = {} if authorization is None else {"Authorization": authorization}
    answer = httpx.get(shared.base_url.join(path), headers=headers)
    assert answer.status_code == 401
    assert answer.headers["www-authenticate"].startswith('Bearer realm="fallow"')
    assert ("invalid_token" in answer.headers["www-authenticate"]) == (authorization is not None)
    assert answer.json()["type"] == "urn:fallow:problem:unauthorised"


def test_upload_without_a_token_is_not_read(shared: Caller) -> None:
    def body() -> object:
        yield b"x" * 65536
        raise AssertionError("the body was read")

    answer = httpx.post(
        shared.base_url.join("/v1/scans"),
        content=b"x" * 65536,
        headers={"Content-Type": "application/x-hdf5"},
    )
    assert answer.status_code == 401
    assert list(shared.parts.files.incoming.iterdir()) == []


def test_health_needs_no_token(shared: Caller) -> None:
    for path, status in (("/health/live", "live"), ("/health/ready", "ready")):
        answer = httpx.get(shared.base_url.join(path))
        assert answer.status_code == 200
        assert answer.json()["status"] == status
    assert answer.json()["checks"] == {"database": "ok", "queue": "ok", "disk": "ok"}
    assert answer.json()["workers"] == 0


def test_health_tells_what_is_wrong(client: Caller) -> None:
    for name in ("queue.sqlite", "queue.sqlite-wal", "queue.sqlite-shm"):
        (client.parts.settings.data / name).unlink(missing_ok=True)
    client.parts.queue._engine.dispose()
    client.parts.queue._impatient.dispose()
    (client.parts.settings.data / "queue.sqlite").mkdir()
    answer = client.get("/health/ready")
    assert answer.status_code == 503
    assert [error["parameter"] for error in answer.json()["errors"]] == ["queue"]


@pytest.mark.parametrize("host", ["evil.example", "localhost.evil.example", "", "127.0.0.1.evil.example:80"])
def test_other_host_names_are_refused(shared: Caller, host: str) -> None:
    answer = shared.get("/v1/scans", headers={"Host": host})
    assert answer.status_code == 421
    assert answer.headers["content-type"] == "application/problem+json"


@pytest.mark.parametrize("host", ["localhost", "LOCALHOST:8765", "127.0.0.1:1", "[::1]:8765", "[::1]"])
def test_own_host_names_are_accepted(shared: Caller, host: str) -> None:
    assert shared.get("/v1/scans", headers={"Host": host}).status_code == 200


def test_more_host_names_can_be_given(tmp_path: Path) -> None:
    environment = {"FALLOW_HOSTS": "Fruit.example, mri.example"}
    settings = ServiceSettings.from_environment(data=tmp_path, environment=environment)
    assert settings.hosts == ("localhost", "127.0.0.1", "[::1]", "fruit.example", "mri.example")


def test_unknown_path_and_method_are_problems(shared: Caller) -> None:
    answer = shared.get("/v1/nowhere")
    assert (answer.status_code, answer.json()["status"]) == (404, 404)
    answer = shared.put("/v1/scans")
    assert answer.status_code == 405
    assert set(answer.headers["allow"].split(", ")) == {"GET", "HEAD", "POST"}
    assert answer.headers["content-type"] == "application/problem+json"


def test_unexpected_error_shows_nothing_but_an_identifier(
    shared: Caller, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    def fail(*arguments: object) -> None:
        raise RuntimeError("secret of the house")

    monkeypatch.setattr(shared.parts.scans, "get", fail)
    answer = shared.get("/v1/scans/any")
    problem = answer.json()
    assert answer.status_code == 500
    assert "secret" not in answer.text
    assert problem["correlation_id"] in problem["detail"]
    assert problem["correlation_id"] in caplog.text
    assert "secret of the house" in caplog.text


def test_full_disk_is_said(shared: Caller, monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*arguments: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(shared.parts.jobs, "get", fail)
    answer = shared.get("/v1/jobs/any")
    assert answer.status_code == 503
    assert "disk" in answer.json()["detail"]
    assert answer.headers["retry-after"]


def test_token_file_is_for_its_owner_alone(client: Caller) -> None:
    path = client.parts.settings.token_file
    assert stat.S_IMODE(path.stat().st_mode) == 0o600
    assert stat.S_IMODE(path.parent.stat().st_mode) == 0o700
    assert len(path.read_text().strip()) >= 40


def test_token_stays_at_the_next_start(settings: ServiceSettings) -> None:
    with running(settings):
        first = settings.token_file.read_text()
    with running(settings) as again:
        assert again.get("/v1/scans").status_code == 200
    assert settings.token_file.read_text() == first


def test_token_that_others_may_read_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "token"
    owner_token(path)
    path.chmod(0o640)
    with pytest.raises(SettingError, match="others may read"):
        owner_token(path)
    path.chmod(0o600)
    path.write_text("\n")
    with pytest.raises(SettingError, match="empty"):
        owner_token(path)


def test_token_is_written_once(tmp_path: Path) -> None:
    path = tmp_path / "token"
    found: list[str] = []
    threads = [threading.Thread(target=lambda: found.append(owner_token(path))) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert set(found) == {path.read_text().strip()}
    assert os.listdir(tmp_path) == ["token"]


def test_comparison_takes_any_bytes() -> None:
    tokens = Tokens("right")
    assert tokens.principal("bearer  right").owner == "owner"
    with pytest.raises(Unauthorised):
        tokens.principal("Bearer r\xefght")


def test_second_service_on_a_folder_is_refused(client: Caller, settings: ServiceSettings) -> None:
    from service.services import Services

    with pytest.raises(SettingError, match="another Fallow service"):
        Services(settings)


def test_openapi_document_is_valid(shared: Caller) -> None:
    from openapi_spec_validator import validate

    document = shared.get("/openapi.json").json()
    validate(document)
    assert document["openapi"].startswith("3.1")
    assert document["components"]["securitySchemes"]["token"]["scheme"] == "bearer"
    assert document["paths"]["/health/live"]["get"]["security"] == []
    for path, operations in document["paths"].items():
        for method, operation in operations.items():
            for status, answer in operation["responses"].items():
                if int(status) >= 400:
                    assert list(answer["content"]) == ["application/problem+json"], (path, method, status)
    order = document["paths"]["/v1/jobs"]["post"]["requestBody"]["content"]["application/json"]["schema"]
    assert order["$ref"].endswith("JobOrder")
    assert "wavelet_strength" in document["components"]["schemas"]["Settings"]["properties"]
