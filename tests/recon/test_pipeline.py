"""The main path: files, progress, cancelling, determinism, report."""

from __future__ import annotations

import json
import subprocess
import sys
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.caution import CAUTION
from recon.errors import CalibrationMissing, Cancelled, InvalidScan, InvalidSettings
from recon.formats import open_scan, read_image, write_scan
from recon.pipeline import reconstruct, reconstruct_file
from recon.progress import STAGES
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings, parse_settings
from tests.recon.scans import Example, error, example


def write_example(path: Path, found: Example, **changes: Any) -> Path:
    """Write an example as a scan file."""
    scan = found.scan
    noise = scan.noise()
    options: dict[str, Any] = {
        "mask": scan.mask(PlaneIndex()),
        "mask_axes": ("ky", "kx"),
        "noise": noise,
        "attributes": {"field_of_view_mm": [88.0, 96.0, 3.0], "slice_spacing_mm": 5.0},
    }
    write_scan(path, np.asarray(scan.kspace_array.data), scan.kspace_array.labels, **(options | changes))
    return path


def test_file_and_memory_give_the_same_image_and_report(tmp_path: Path) -> None:
    found = example(sizes={"slice": 2})
    scan_path, image_path = write_example(tmp_path / "scan.h5", found), tmp_path / "image.h5"
    report = reconstruct_file(scan_path, image_path, provenance={"version": "test"})
    stored = read_image(image_path)
    with open_scan(scan_path) as scan:
        in_memory = reconstruct(scan, provenance={"version": "test"})
    np.testing.assert_array_equal(stored.image, in_memory.image)
    np.testing.assert_array_equal(stored.residual_image, in_memory.residual_image)
    assert stored.axes == in_memory.axes == ("slice", "y", "x")
    assert stored.report == json.loads(json.dumps(report)) == json.loads(json.dumps(in_memory.report))
    assert stored.provenance == {"version": "test"}
    assert stored.attributes == {"field_of_view_mm": [88.0, 96.0, 3.0], "slice_spacing_mm": 5.0}


def test_pixel_size_is_the_field_of_view_over_the_matrix(tmp_path: Path) -> None:
    """Source: pixel = FOV / N; readout oversampling widens the encoded field of view, not the image's."""
    found = example(attributes={"readout_oversampling": 2.0})
    path = write_example(
        tmp_path / "scan.h5",
        found,
        attributes={"field_of_view_mm": [176.0, 96.0, 3.0], "readout_oversampling": 2.0},
    )
    reconstruct_file(path, tmp_path / "image.h5")
    stored = read_image(tmp_path / "image.h5")
    rows, columns = stored.image.shape
    x, y, _ = stored.attributes["field_of_view_mm"]
    assert (rows, columns) == (48, 44)
    assert (x, y) == (88.0, 96.0)
    assert (x / columns, y / rows) == (2.0, 2.0)


def test_same_input_gives_the_same_bytes() -> None:
    first, second = (reconstruct(example().scan) for _ in range(2))
    assert first.image.tobytes() == second.image.tobytes()
    assert first.report == second.report


def test_progress_names_known_stages_and_only_grows() -> None:
    seen: list[tuple[str, float]] = []
    reconstruct(example(sizes={"slice": 3}).scan, progress=lambda stage, part: seen.append((stage, part)))
    stages, parts = zip(*seen, strict=True)
    assert set(stages) <= set(STAGES)
    assert {"inspect", "whiten", "compress", "coil-maps", "solve", "write"} <= set(stages)
    assert all(0 <= a <= b <= 1 for a, b in pairwise(parts))
    assert parts[-1] == 1
    assert len([part for stage, part in seen if stage == "solve"]) > 20


@pytest.mark.parametrize("stage", ["inspect", "coil-maps", "solve", "write"])
def test_raising_from_progress_cancels(tmp_path: Path, stage: str) -> None:
    path = write_example(tmp_path / "scan.h5", example(sizes={"slice": 2}))

    def cancel(now: str, part: float) -> None:
        if now == stage:
            raise Cancelled("stopped by the caller")

    with pytest.raises(Cancelled):
        reconstruct_file(path, tmp_path / "image.h5", progress=cancel)
    if (tmp_path / "image.h5").exists():
        with pytest.raises(InvalidScan):  # what is left is never taken for a result
            read_image(tmp_path / "image.h5")


def test_report_has_the_published_keys_and_is_plain_json() -> None:
    report = reconstruct(
        example(sizes={"slice": 2, "frame": 2}).scan, provenance={"scan_sha256": "ab"}
    ).report
    json.dumps(report, allow_nan=False)
    assert report["caution"] == CAUTION
    assert report["schema_version"] == 1
    assert report["provenance"] == {"scan_sha256": "ab"}
    assert report["findings"] == []
    chi = report["consistency"]["reduced_chi_squared"]
    assert len(chi["by_coil"]) == 4
    assert len(chi["by_slice"]) == len(chi["by_frame"]) == 2
    assert all(ring["value"] > 0 for ring in chi["by_ring"])
    assert report["sampling"]["net_acceleration"] == pytest.approx(48 / 32)
    assert report["sampling"]["calibration"] == {"rows": 17, "columns": 44}
    assert report["settings"]["method"] == "compressed-sensing"
    assert isinstance(report["settings"]["wavelet_strength"], float)
    assert isinstance(report["settings"]["tv_strength"], float)
    assert [plane["stop_reason"] for plane in report["solver"]["planes"]] == ["optimal"] * 2
    assert [plane["frames"] for plane in report["solver"]["planes"]] == [2, 2]


def test_settings_reach_the_solver() -> None:
    found = example(noise=0.1)
    base = reconstruct(found.scan)
    for values in ({"wavelet_strength": 2.0}, {"tv_strength": 2.0}, {"wavelet": "haar"}, {"tolerance": 0.05}):
        other = reconstruct(found.scan, parse_settings(values))
        assert np.abs(other.image - base.image).max() > 1e-3, values
    few = reconstruct(found.scan, Settings(max_iterations=2, tolerance=1e-6))
    assert few.report["solver"]["iterations"] == 2
    assert [finding["code"] for finding in few.report["findings"]] == ["not-converged"]
    weak, strong = (
        reconstruct(found.scan, Settings(method="tikhonov", tikhonov_strength=strength))
        for strength in (1e-3, 10.0)
    )
    assert np.abs(strong.image).mean() < 0.5 * np.abs(weak.image).mean()


def test_missing_pieces_are_findings() -> None:
    found = example(has_noise_scan=False)
    bare = Scan(found.scan.kspace_array)
    result = reconstruct(bare)
    codes = [finding["code"] for finding in result.report["findings"]]
    assert {"mask-inferred", "noise-missing"} <= set(codes)
    assert error(result.image, found) < 0.1


def test_sampled_zeros_and_samples_outside_are_counted() -> None:
    found = example()
    kspace = found.scan.kspace_array.take().copy()
    mask = found.scan.mask(PlaneIndex()).copy()
    kspace[:, 0] = 0
    mask[0] = True
    sampled = np.flatnonzero(mask[:, 0])
    mask[sampled[-1]] = False
    result = reconstruct(
        Scan(
            LabelledArray(kspace, ("coil", "ky", "kx")),
            mask_array=LabelledArray(mask, ("ky", "kx")),
            noise_array=found.scan.noise_array,
        )
    )
    findings = {finding["code"]: finding for finding in result.report["findings"]}
    assert findings["sampled-zeros"]["numbers"]["positions"] == 44
    assert findings["samples-outside-mask"]["numbers"]["positions"] == 44
    assert all(finding["message"].endswith(".") for finding in findings.values())


@pytest.mark.parametrize(
    ("columns", "code"),
    [(slice(0, 30), "partial-echo"), (slice(None, None, 2), "readout-undersampled")],
)
def test_mask_varying_along_the_readout_is_a_finding(columns: slice, code: str) -> None:
    found = example()
    mask = np.zeros((48, 44), bool)
    mask[:, columns] = True
    mask[16:32, 14:30] = True
    if code == "partial-echo":
        mask[:, 30:] = False
    result = reconstruct(
        Scan(
            found.scan.kspace_array,
            mask_array=LabelledArray(mask, ("ky", "kx")),
            noise_array=found.scan.noise_array,
        )
    )
    assert code in [finding["code"] for finding in result.report["findings"]]


def test_what_cannot_be_done_is_refused_before_time_is_spent() -> None:
    found = example()
    gappy = Scan(
        found.scan.kspace_array,
        mask_array=LabelledArray(np.arange(48) % 2 == 0, ("ky",)),
        noise_array=found.scan.noise_array,
    )
    stages: list[str] = []
    with pytest.raises(CalibrationMissing):
        reconstruct(gappy, progress=lambda stage, part: stages.append(stage))
    assert "solve" not in stages
    with pytest.raises(InvalidSettings):
        reconstruct(found.scan, parse_settings({"coil_maps": "supplied"}))
    fine = reconstruct(gappy, parse_settings({"method": "zero-filled", "combination": "root-sum-of-squares"}))
    assert fine.report["consistency"]["reduced_chi_squared"] is None


def test_importing_settings_loads_no_numerics() -> None:
    code = "import sys, recon.settings, recon.errors; print('numpy' in sys.modules)"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "False"
