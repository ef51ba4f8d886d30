"""`/v1/scans`: what is accepted, what is refused, and that nothing is left of what is refused."""

from __future__ import annotations

import base64
import hashlib
import socket
import time
from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from recon.caution import CAUTION
from service.settings import ServiceSettings

from .conftest import MEDIA_TYPE, UPLOAD_LIMIT, Caller, MakeScan, running

HEADERS = {"Content-Type": MEDIA_TYPE}


def _left_behind(settings: ServiceSettings) -> list[str]:
    return [path.name for folder in ("incoming", "scans") for path in (settings.data / folder).iterdir()]


def test_scan_is_accepted_with_its_facts(client: Caller, make_scan: MakeScan) -> None:
    content = make_scan()
    answer = client.post("/v1/scans", params={"label": "apple"}, content=content, headers=HEADERS)
    assert answer.status_code == 201
    scan = answer.json()
    assert answer.headers["location"] == f"/v1/scans/{scan['id']}"
    assert scan["sha256"] == hashlib.sha256(content).hexdigest()
    assert scan["bytes"] == len(content)
    assert scan["axes"] == {"coil": 4, "ky": 32, "kx": 32}
    assert scan["sampling"]["net_acceleration"] > 1
    assert scan["title"] == "apple 0"
    assert scan["label"] == "apple"
    assert scan["state"] == "ready"
    assert scan["caution"] == CAUTION
    assert any(finding["code"] for finding in scan["findings"])
    assert client.get(answer.headers["location"]).json() == scan


def test_same_content_is_the_same_scan(
    client: Caller, make_scan: MakeScan, settings: ServiceSettings
) -> None:
    content = make_scan()
    first = client.post("/v1/scans", content=content, headers=HEADERS)
    again = client.post("/v1/scans", params={"label": "other"}, content=content, headers=HEADERS)
    assert again.status_code == 200
    assert again.json() == {**first.json(), "label": "other"}
    assert client.get(first.headers["location"]).json()["label"] == "other"
    unnamed = client.post("/v1/scans", content=content, headers=HEADERS)
    assert unnamed.json()["label"] == "other"
    assert again.headers["location"] == first.headers["location"]
    assert len(_left_behind(settings)) == 2


def test_preview_is_a_picture(client: Caller, scan: dict[str, Any]) -> None:
    answer = client.get(f"/v1/scans/{scan['id']}/preview.png")
    assert answer.status_code == 200
    assert answer.headers["content-type"] == "image/png"
    assert answer.content.startswith(b"\x89PNG")
    assert CAUTION.encode() in answer.content


def test_preview_knows_ranges_conditions_and_digest(client: Caller, scan: dict[str, Any]) -> None:
    path = f"/v1/scans/{scan['id']}/preview.png"
    whole = client.get(path)
    digest = base64.b64encode(hashlib.sha256(whole.content).digest()).decode()
    assert whole.headers["repr-digest"] == f"sha-256=:{digest}:"
    part = client.get(path, headers={"Range": "bytes=0-3"})
    assert (part.status_code, part.content) == (206, whole.content[:4])
    beyond = client.get(path, headers={"Range": "bytes=99999999-"})
    assert (beyond.status_code, beyond.headers["content-type"]) == (416, "application/problem+json")
    assert client.get(path, headers={"Range": "bytes=a-b"}).status_code == 200
    assert client.get(path, headers={"If-None-Match": whole.headers["etag"]}).status_code == 304
    assert client.head(path).headers["content-length"] == str(len(whole.content))


def test_label_with_control_characters_is_refused(shared: Caller, make_scan: MakeScan) -> None:
    answer = shared.post("/v1/scans", params={"label": "a\nb"}, content=make_scan(), headers=HEADERS)
    assert answer.status_code == 422
    assert answer.json()["errors"][0]["parameter"] == "label"
    assert "control characters" in answer.json()["detail"]


def test_repeated_query_parameter_is_refused(shared: Caller) -> None:
    answer = shared.get("/v1/scans?limit=1&limit=2")
    assert answer.status_code == 400
    assert answer.json()["errors"] == [{"parameter": "limit", "detail": "given more than once"}]


def test_deleted_scan_is_gone(client: Caller, scan: dict[str, Any], settings: ServiceSettings) -> None:
    assert client.delete(f"/v1/scans/{scan['id']}").status_code == 204
    assert client.get(f"/v1/scans/{scan['id']}").status_code == 404
    assert client.delete(f"/v1/scans/{scan['id']}").status_code == 404
    assert _left_behind(settings) == []


def test_scan_with_an_unfinished_job_stays(
    client: Caller, scan: dict[str, Any], order: Callable[..., dict[str, Any]]
) -> None:
    job = order()
    answer = client.delete(f"/v1/scans/{scan['id']}")
    assert answer.status_code == 409
    assert job["id"] in answer.json()["detail"]
    client.post(f"/v1/jobs/{job['id']}/dismiss")
    assert client.delete(f"/v1/scans/{scan['id']}").status_code == 204


def test_digest_is_checked(client: Caller, make_scan: MakeScan, settings: ServiceSettings) -> None:
    content = make_scan()
    wrong = base64.b64encode(hashlib.sha256(b"other").digest()).decode()
    answer = client.post(
        "/v1/scans", content=content, headers={**HEADERS, "Repr-Digest": f"sha-256=:{wrong}:"}
    )
    assert answer.status_code == 400
    assert "Repr-Digest" in answer.json()["detail"]
    assert _left_behind(settings) == []
    right = base64.b64encode(hashlib.sha512(content).digest()).decode()
    answer = client.post(
        "/v1/scans", content=content, headers={**HEADERS, "Repr-Digest": f"sha-512=:{right}:"}
    )
    assert answer.status_code == 201


@pytest.mark.parametrize("digest", ["md5=:AAAA:", "sha-256=:AAAA:", "sha-256=AAAA", "nonsense", ""])
def test_digest_that_cannot_be_checked_is_refused(shared: Caller, make_scan: MakeScan, digest: str) -> None:
    answer = shared.post("/v1/scans", content=make_scan(), headers={**HEADERS, "Repr-Digest": digest})
    assert answer.status_code == 400
    assert "Repr-Digest" in answer.json()["detail"]


@pytest.mark.parametrize(
    ("content", "headers", "status", "words"),
    [
        (b"", HEADERS, 400, "empty"),
        (b"x", {"Content-Type": "application/json"}, 415, MEDIA_TYPE),
        (b"x", {}, 415, "Content-Type"),
        (b"x" * (UPLOAD_LIMIT + 1), HEADERS, 413, str(UPLOAD_LIMIT)),
        (b"no HDF5 at all", HEADERS, 422, "HDF5"),
    ],
    ids=["empty", "wrong type", "no type", "too large", "not HDF5"],
)
def test_body_that_is_no_scan_is_refused(
    shared: Caller,
    content: bytes,
    headers: dict[str, str],
    status: int,
    words: str,
) -> None:
    answer = shared.post("/v1/scans", content=content, headers=headers)
    problem = answer.json()
    assert answer.status_code == status == problem["status"]
    assert answer.headers["content-type"] == "application/problem+json"
    assert problem["type"].startswith("urn:fallow:problem:")
    assert words in problem["detail"]
    assert _left_behind(shared.parts.settings) == []


def test_streamed_body_is_counted(shared: Caller) -> None:
    pieces = (b"x" * 65536 for _ in range(UPLOAD_LIMIT // 65536 + 1))
    answer = shared.post("/v1/scans", content=pieces, headers=HEADERS)
    assert answer.status_code == 413
    assert _left_behind(shared.parts.settings) == []
    assert shared.post("/v1/scans", content=iter(()), headers=HEADERS).status_code == 400


def _write(path: Path, **changes: Any) -> None:
    """Write a scan by hand, so that it can be wrong in ways that `write_scan` refuses."""
    arrays: dict[str, tuple[np.ndarray[Any, Any], str]] = {
        "kspace": (np.ones((2, 24, 24), np.complex64), "coil,ky,kx"),
        **changes,
    }
    with h5py.File(path, "w") as file:
        file.attrs["layout"] = "fallow-scan"
        file.attrs["layout_version"] = 1
        for name, (values, axes) in arrays.items():
            if values is not None:
                file[name] = values
                if axes:
                    file[name].attrs["axes"] = axes


def _with_nan(value: float) -> np.ndarray[Any, Any]:
    samples = np.ones((2, 24, 24), np.complex64)
    samples[1, 3, 4] = value
    return samples


REFUSED: dict[str, tuple[dict[str, Any], str]] = {
    "no kspace": ({"kspace": (None, "")}, "/kspace"),
    "unlabelled": ({"kspace": (np.ones((2, 24, 24), np.complex64), "")}, "axes"),
    "unknown axis": ({"kspace": (np.ones((2, 24, 24), np.complex64), "coil,ky,time")}, "time"),
    "integers": ({"kspace": (np.ones((2, 24, 24), np.int32), "coil,ky,kx")}, "complex"),
    "no samples": ({"kspace": (np.ones((2, 0, 24), np.complex64), "coil,ky,kx")}, "ky"),
    "NaN": ({"kspace": (_with_nan(float("nan")), "coil,ky,kx")}, "NaN"),
    "Inf": ({"kspace": (_with_nan(float("inf")), "coil,ky,kx")}, "Inf"),
    "mask of another shape": ({"mask": (np.ones(23, bool), "ky")}, "/mask"),
    "mask all false": ({"mask": (np.zeros(24, bool), "ky")}, "mask"),
    "noise of other coils": ({"noise": (np.ones((3, 64), np.complex64), "coil,sample")}, "/noise"),
}


@pytest.mark.parametrize(("changes", "words"), REFUSED.values(), ids=REFUSED)
def test_scan_that_cannot_be_used_is_refused(
    shared: Caller, tmp_path: Path, changes: dict[str, Any], words: str
) -> None:
    path = tmp_path / "wrong.h5"
    _write(path, **changes)
    answer = shared.post("/v1/scans", content=path.read_bytes(), headers=HEADERS)
    assert answer.status_code == 422, answer.text
    assert answer.headers["content-type"] == "application/problem+json"
    assert words in answer.json()["detail"]
    assert _left_behind(shared.parts.settings) == []
    assert shared.get("/v1/scans").json()["items"] == []


def test_disagreeing_axes_are_refused(shared: Caller, tmp_path: Path) -> None:
    path = tmp_path / "wrong.h5"
    _write(path)
    with h5py.File(path, "r+") as file:
        file["kspace"].attrs["axes_fastest_first"] = "ky,kx,coil"
    answer = shared.post("/v1/scans", content=path.read_bytes(), headers=HEADERS)
    assert answer.status_code == 422
    assert "axes_fastest_first" in answer.json()["detail"]
    assert _left_behind(shared.parts.settings) == []


@pytest.mark.parametrize("kept", [0.3, 0.9])
def test_truncated_file_is_refused(shared: Caller, make_scan: MakeScan, kept: float) -> None:
    content = make_scan()
    answer = shared.post("/v1/scans", content=content[: int(kept * len(content))], headers=HEADERS)
    assert answer.status_code == 422
    assert "truncated" in answer.json()["detail"] or "HDF5" in answer.json()["detail"]
    assert _left_behind(shared.parts.settings) == []


@pytest.mark.parametrize("path", ["/v1/scans/unknown", "/v1/scans/unknown/preview.png"])
def test_unknown_scan_is_not_found(shared: Caller, path: str) -> None:
    answer = shared.get(path)
    assert answer.status_code == 404
    assert "unknown" in answer.json()["detail"]


def test_list_goes_page_by_page(client: Caller, make_scan: MakeScan) -> None:
    sent = [
        client.post("/v1/scans", params={"label": f"n{i % 2}"}, content=make_scan(i), headers=HEADERS).json()[
            "id"
        ]
        for i in range(3)
    ]
    first = client.get("/v1/scans", params={"limit": 2}).json()
    second = client.get("/v1/scans", params={"limit": 2, "cursor": first["next"]}).json()
    assert [scan["id"] for scan in first["items"] + second["items"]] == sent[::-1]
    assert second["next"] is None
    labelled = client.get("/v1/scans", params={"label": "n0", "state": "ready"}).json()["items"]
    assert [scan["id"] for scan in labelled] == [sent[2], sent[0]]
    moment = datetime.now(UTC) - timedelta(hours=1)
    assert len(client.get("/v1/scans", params={"created_after": moment.isoformat()}).json()["items"]) == 3
    assert client.get("/v1/scans", params={"created_before": moment.isoformat()}).json()["items"] == []


@pytest.mark.parametrize(
    ("query", "status", "name"),
    [
        ({"cursor": "nonsense"}, 400, "cursor"),
        ({"limit": "0"}, 422, "limit"),
        ({"state": "lost"}, 422, "state"),
        ({"created_after": "yesterday"}, 422, "created_after"),
        ({"created_after": "2026-01-01T00:00:00"}, 422, "created_after"),
        ({"created_after": "2026"}, 422, "created_after"),
        ({"created_before": "1767225600.5"}, 422, "created_before"),
        ({"created_before": "2026-01-01"}, 422, "created_before"),
        ({"colour": "red"}, 400, "colour"),
    ],
)
def test_filter_that_means_nothing_is_refused(
    shared: Caller, query: dict[str, str], status: int, name: str
) -> None:
    answer = shared.get("/v1/scans", params=query)
    assert answer.status_code == status
    assert answer.json()["errors"][0]["parameter"] == name


def test_stalled_upload_is_given_up(tmp_path: Path, make_scan: MakeScan) -> None:
    settings = replace(ServiceSettings(data=tmp_path / "data"), stall_seconds=0.3)
    with running(settings) as caller:
        port, token = caller.base_url.port, caller.headers["authorization"]
        with socket.create_connection(("127.0.0.1", port or 0), timeout=20) as line:
            head = (
                f"POST /v1/scans HTTP/1.1\r\nHost: localhost\r\nAuthorization: {token}\r\n"
                f"Content-Type: {MEDIA_TYPE}\r\nContent-Length: 100000\r\n\r\n"
            )
            line.sendall(head.encode() + make_scan()[:100])
            answer = b"".join(iter(lambda: line.recv(65536), b""))
        assert b" 408 " in answer.splitlines()[0]
        assert b"urn:fallow:problem:stalled-upload" in answer
        assert _left_behind(settings) == []


def test_caller_who_goes_away_leaves_nothing(
    client: Caller, make_scan: MakeScan, settings: ServiceSettings
) -> None:
    port, token = client.base_url.port, client.headers["authorization"]
    with socket.create_connection(("127.0.0.1", port or 0), timeout=20) as line:
        head = (
            f"POST /v1/scans HTTP/1.1\r\nHost: localhost\r\nAuthorization: {token}\r\n"
            f"Content-Type: {MEDIA_TYPE}\r\nContent-Length: 100000\r\n\r\n"
        )
        line.sendall(head.encode() + make_scan()[:100])
        while not _left_behind(settings):
            time.sleep(0.02)
    deadline = time.monotonic() + 10
    while _left_behind(settings):
        assert time.monotonic() < deadline
        time.sleep(0.02)
