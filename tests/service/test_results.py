"""Results: complete files with digests, ranges, conditions and HEAD; nothing before the job is successful."""

from __future__ import annotations

import base64
import hashlib
import io
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from PIL import Image

from recon.caution import CAUTION
from recon.formats import read_image
from service.provenance import fallow_version

from .conftest import Caller, runner_of, send

Order = Callable[..., dict[str, Any]]


@pytest.fixture(scope="module")
def done(shared: Caller, shared_scan: dict[str, Any]) -> str:
    """Path of a successful job."""
    order = {
        "kind": "reconstruction",
        "scan": shared_scan["id"],
        "settings": {"method": "tikhonov"},
        "label": "pear",
    }
    job = shared.post("/v1/jobs", json=order).json()
    runner_of(shared.parts).run(job["id"])
    return f"/v1/jobs/{job['id']}"


def test_image_is_complete(shared: Caller, shared_scan: dict[str, Any], done: str, tmp_path: Path) -> None:
    answer = shared.get(f"{done}/image.h5")
    assert answer.status_code == 200
    assert answer.headers["content-type"] == "application/x-hdf5"
    digest = hashlib.sha256(answer.content)
    assert answer.headers["repr-digest"] == f"sha-256=:{base64.b64encode(digest.digest()).decode()}:"
    assert answer.headers["etag"] == f'"{digest.hexdigest()}"'
    (tmp_path / "image.h5").write_bytes(answer.content)
    result = read_image(tmp_path / "image.h5")
    assert result.axes == ("y", "x")
    assert result.image.shape == (32, 32)
    assert result.report == shared.get(f"{done}/report").json()
    assert result.provenance["scan_sha256"] == shared_scan["sha256"]
    assert result.provenance["version"] == fallow_version()
    assert result.provenance["duration_seconds"] > 0
    assert result.provenance["packages"]["numpy"]
    assert result.provenance["packages"]["numba"]
    assert result.provenance["settings"] == result.report["settings"]
    assert result.provenance["settings"]["tikhonov_strength"] != "auto", "as resolved"


def test_report_is_json_with_caution(shared: Caller, done: str) -> None:
    answer = shared.get(f"{done}/report")
    assert answer.headers["content-type"] == "application/json"
    report = answer.json()
    assert report["caution"] == CAUTION
    assert report["schema_version"] == 1
    assert {"findings", "consistency", "solver", "sampling", "settings", "provenance"} <= set(report)


def test_pictures_carry_the_caution(shared: Caller, done: str) -> None:
    listed = shared.get(f"{done}/pictures").json()
    assert listed["caution"] == CAUTION
    (picture,) = listed["items"]
    assert picture["name"] == "image"
    content = shared.get(picture["href"]).content
    assert len(content) == picture["bytes"]
    with Image.open(io.BytesIO(content)) as opened:
        assert opened.text["Caution"] == CAUTION  # type: ignore[attr-defined]
        assert "pear" in opened.text["Title"]  # type: ignore[attr-defined]
    answer = shared.get(f"{done}/pictures/residue.png")
    assert answer.status_code == 404
    assert "image" in answer.json()["detail"]


@pytest.mark.parametrize(
    ("wanted", "expected"),
    [("bytes=0-9", slice(0, 10)), ("bytes=100-", slice(100, None)), ("bytes=-7", slice(-7, None))],
)
def test_range_is_answered(shared: Caller, done: str, wanted: str, expected: slice) -> None:
    whole = shared.get(f"{done}/image.h5")
    part = shared.get(f"{done}/image.h5", headers={"Range": wanted})
    assert part.status_code == 206
    assert part.content == whole.content[expected]
    assert part.headers["repr-digest"] == whole.headers["repr-digest"]
    assert part.headers["content-range"].endswith(f"/{len(whole.content)}")


def test_several_ranges_are_answered(shared: Caller, done: str) -> None:
    answer = shared.get(f"{done}/image.h5", headers={"Range": "bytes=0-3,8-11"})
    assert answer.status_code == 206
    assert answer.headers["content-type"].startswith("multipart/byteranges")
    assert b"\x89HDF" in answer.content


@pytest.mark.parametrize(
    "wanted", ["bytes=9-2", "lines=1-2", "bytes=a-b", "bytes=", "bytes=" + "0-1," * 200 + "2-3"]
)
def test_range_that_means_nothing_is_ignored(shared: Caller, done: str, wanted: str) -> None:
    answer = shared.get(f"{done}/image.h5", headers={"Range": wanted})
    assert answer.status_code == 200
    assert answer.content == shared.get(f"{done}/image.h5").content


def test_range_beyond_the_end_is_refused(shared: Caller, done: str) -> None:
    size = len(shared.get(f"{done}/image.h5").content)
    answer = shared.get(f"{done}/image.h5", headers={"Range": f"bytes={size}-"})
    assert answer.status_code == 416
    assert answer.headers["content-range"] == f"bytes */{size}"
    assert answer.headers["content-type"] == "application/problem+json"


def test_range_partly_beyond_the_end_is_answered_in_part(shared: Caller, done: str) -> None:
    """RFC 9110, section 14.2: a set of ranges is satisfiable when one of them is."""
    answer = shared.get(f"{done}/image.h5", headers={"Range": "bytes=0-1,99999999-"})
    assert answer.status_code == 206
    assert answer.content == shared.get(f"{done}/image.h5").content[:2]


def test_range_of_another_version_is_not_mixed_in(shared: Caller, done: str) -> None:
    etag = shared.get(f"{done}/image.h5").headers["etag"]
    ask = {"Range": "bytes=0-9"}
    assert shared.get(f"{done}/image.h5", headers={**ask, "If-Range": etag}).status_code == 206
    assert shared.get(f"{done}/image.h5", headers={**ask, "If-Range": '"other"'}).status_code == 200


def test_known_version_is_not_sent_again(shared: Caller, done: str) -> None:
    etag = shared.get(f"{done}/image.h5").headers["etag"]
    answer = shared.get(f"{done}/image.h5", headers={"If-None-Match": f'"x", {etag}'})
    assert answer.status_code == 304
    assert answer.content == b""
    assert answer.headers["etag"] == etag


@pytest.mark.parametrize(
    "tail", ["", "/image.h5", "/report", "/pictures", "/pictures/image.png", "/events", "/../../scans"]
)
def test_head_has_the_header_and_no_body(shared: Caller, done: str, tail: str) -> None:
    head, get = shared.head(f"{done}{tail}"), shared.get(f"{done}{tail}")
    assert head.status_code == get.status_code == 200
    assert head.content == b""
    names = {"content-type", "etag", "repr-digest"}
    if "text/event-stream" not in get.headers["content-type"]:
        names.add("content-length")
    assert {name: head.headers.get(name) for name in names} == {name: get.headers.get(name) for name in names}


def test_head_of_a_problem_has_no_body(shared: Caller) -> None:
    answer = shared.head("/v1/jobs/unknown")
    assert answer.status_code == 404
    assert answer.content == b""


@pytest.mark.parametrize("tail", ["/image.h5", "/report", "/pictures", "/pictures/image.png"])
def test_unfinished_job_has_no_results(shared: Caller, shared_scan: dict[str, Any], tail: str) -> None:
    job = shared.post("/v1/jobs", json={"kind": "reconstruction", "scan": shared_scan["id"]}).json()
    answer = shared.get(f"/v1/jobs/{job['id']}{tail}")
    assert answer.status_code == 409
    assert int(answer.headers["retry-after"]) >= 1
    assert "accepted" in answer.json()["detail"]
    shared.post(f"/v1/jobs/{job['id']}/dismiss")


def test_lost_file_is_reported(client: Caller, finished: dict[str, Any]) -> None:
    (client.parts.files.result(finished["id"]) / "image.h5").unlink()
    answer = client.get(f"/v1/jobs/{finished['id']}/image.h5")
    assert answer.status_code == 503
    assert "image.h5" in answer.json()["detail"]


def test_scan_can_go_while_results_stay(shared: Caller, done: str, tmp_path: Path) -> None:
    from .conftest import scan_content

    scan = send(shared, scan_content(tmp_path / "other.h5", seed=7))
    job = shared.post("/v1/jobs", json={"kind": "reconstruction", "scan": scan["id"]}).json()
    runner_of(shared.parts).run(job["id"])
    assert shared.delete(f"/v1/scans/{scan['id']}").status_code == 204
    assert shared.get(f"/v1/jobs/{job['id']}/image.h5").status_code == 200
