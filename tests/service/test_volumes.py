"""A volume from upload to picture; `joint` where it means nothing is refused when the job is ordered."""

from __future__ import annotations

import io
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from PIL import Image

from recon.formats import read_image, write_scan
from tests.recon.volumes import volume

from .conftest import Caller, runner_of, send

SHAPE = (14, 16, 20)


@pytest.fixture(scope="module")
def sent(shared: Caller, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    found = volume(SHAPE, attributes={"field_of_view_mm": [40.0, 32.0, 42.0]})
    path = tmp_path_factory.mktemp("volume") / "scan.h5"
    write_scan(
        path, found.kspace, ("coil", "kz", "ky", "kx"), mask=found.mask, mask_axes=("kz", "ky"),
        noise=found.noise, attributes=found.scan.attributes, compression="gzip",
    )  # fmt: skip
    return send(shared, path.read_bytes())


def test_facts_and_quick_look_of_a_volume(shared: Caller, sent: dict[str, Any]) -> None:
    assert sent["axes"] == {"coil": 4, "kz": 14, "ky": 16, "kx": 20}
    assert sent["sampling"]["net_acceleration"] > 1
    picture = shared.get(f"/v1/scans/{sent['id']}/preview.png")
    assert picture.status_code == 200
    grey = np.asarray(Image.open(io.BytesIO(picture.content)).convert("L")).astype(float)
    height = grey.shape[1] * 16 // 20
    assert grey[height // 3 : 2 * height // 3].mean() > 3 * grey[: height // 12].mean()


@pytest.mark.parametrize("mode", ["planes", "joint"])
def test_a_job_on_a_volume(shared: Caller, sent: dict[str, Any], mode: str, tmp_path: Path) -> None:
    settings = {"volume": mode, "method": "tikhonov", "max_iterations": 5}
    job = shared.post(
        "/v1/jobs", json={"kind": "reconstruction", "scan": sent["id"], "settings": settings}
    ).json()
    runner_of(shared.parts).run(job["id"])
    done = shared.get(f"/v1/jobs/{job['id']}").json()
    assert done["state"] == "successful", done["error"]
    (tmp_path / "image.h5").write_bytes(shared.get(f"/v1/jobs/{job['id']}/image.h5").content)
    image = read_image(tmp_path / "image.h5")
    assert (image.axes, image.image.shape) == (("z", "y", "x"), SHAPE)
    assert image.attributes["field_of_view_mm"] == [40.0, 32.0, 42.0]
    picture = shared.get(f"/v1/jobs/{job['id']}/pictures/image.png")
    assert Image.open(io.BytesIO(picture.content)).text["Title"].endswith("z 7")  # type: ignore[attr-defined]


def test_joint_of_a_scan_of_planes_is_refused(shared: Caller, shared_scan: dict[str, Any]) -> None:
    order = {"kind": "reconstruction", "scan": shared_scan["id"], "settings": {"volume": "joint"}}
    answer = shared.post("/v1/jobs", json=order)
    assert answer.status_code == 422
    assert [error["pointer"] for error in answer.json()["errors"]] == ["/settings/volume"]
    assert "kz, ky and kx" in answer.text
