"""What is worked out of a whole scan before its planes: cases in which a slip would spoil the image silently."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.coils.noise import estimate_whitening
from recon.errors import InvalidScan
from recon.feasibility import check_job
from recon.formats import write_scan
from recon.inspection import inspect
from recon.pipeline import reconstruct, reconstruct_file
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings, parse_settings
from tests.recon.helpers import complex_normal
from tests.recon.scans import Example, error, example


def with_reference(found: Example, scale: float, *, columns: int | None = None) -> Scan:
    """The scan with its own fully sampled centre, scaled, as a separate calibration."""
    kspace = np.asarray(found.scan.kspace_array.data)
    rows, width = kspace.shape[-2:]
    kept = columns or width
    start = width // 2 - kept // 2
    block = scale * kspace[:, rows // 2 - 8 : rows // 2 + 8, start : start + kept]
    return replace(
        found.scan, reference_array=LabelledArray(block.astype(np.complex64), ("coil", "ky", "kx"))
    )


@pytest.mark.parametrize("method", ["compressed-sensing", "tikhonov", "zero-filled"])
def test_one_coil_uses_the_map_that_is_supplied(method: str) -> None:
    """A map with a phase of its own takes that phase out of the image, in every method."""
    found = example(coils=1)
    # held-out lines of one coil tell nothing of the strength
    settings = parse_settings({"method": method, "tikhonov_strength": 0.03})
    plain = reconstruct(found.scan, settings).image
    columns = np.linspace(-1, 1, 44)
    map_ = np.exp(1j * columns)[np.newaxis, np.newaxis].repeat(48, axis=1).astype(np.complex64)
    scan = replace(found.scan, sensitivity_array=LabelledArray(map_, ("coil", "y", "x")))
    mapped = reconstruct(scan, settings)
    assert mapped.report["settings"]["coil_maps"] == "supplied"
    assert mapped.report["consistency"]["reduced_chi_squared"] is not None
    turned = mapped.image * map_[0]
    assert np.linalg.norm(turned - plain) < 0.05 * np.linalg.norm(plain)
    assert np.linalg.norm(mapped.image - plain) > 0.3 * np.linalg.norm(plain)


def test_supplied_maps_are_held_against_the_object() -> None:
    """Zero wherever the object is: refused; zero in a part of it: a finding that speaks of the maps."""
    found = example()
    maps = np.ones((4, 48, 44), np.complex64)
    maps[:, 2:46, 2:42] = 0
    beside = replace(found.scan, sensitivity_array=LabelledArray(maps, ("coil", "y", "x")))
    with pytest.raises(InvalidScan, match="place and orientation"):
        reconstruct(beside)
    maps[:, :24] = 1
    half = replace(found.scan, sensitivity_array=LabelledArray(maps, ("coil", "y", "x")))
    report = reconstruct(half, Settings(max_iterations=3)).report
    (finding,) = [finding for finding in report["findings"] if finding["code"] == "maps-incomplete"]
    assert "correct /sensitivity" in finding["message"]
    assert finding["numbers"]["smallest_share"] == pytest.approx(0.5, abs=0.15)
    assert report["preparation"]["coil_maps"]["source"] == "supplied"


@pytest.mark.parametrize("scale", [1e-4, 1e-2, 1.0, 1e4])
def test_scale_of_the_reference_does_not_matter(scale: float) -> None:
    """A separate calibration may have any receiver gain."""
    found = example()
    base = error(reconstruct(found.scan).image, found)
    assert error(reconstruct(with_reference(found, scale)).image, found) < 1.1 * base


def test_reference_of_zeros_is_refused() -> None:
    with pytest.raises(InvalidScan, match="/reference of slice 0 is zero everywhere"):
        reconstruct(with_reference(example(), 0.0))


def test_reference_with_partial_echo_and_oversampling() -> None:
    """Maps from a reference cover the field of view that is solved: oversampling included if readouts are not whole."""
    found = example(attributes={"readout_oversampling": 2.0})
    mask = np.asarray(found.scan.mask(PlaneIndex())).copy()
    mask[:, :20] = False
    scan = replace(with_reference(found, 1.0), mask_array=LabelledArray(mask, ("ky", "kx")))
    chi = reconstruct(scan).report["consistency"]["reduced_chi_squared"]["value"]
    assert 0.6 < chi < 1.3


def test_noise_free_scan_without_noise_readouts_is_not_spoilt() -> None:
    """Signal in the periphery is coherent between coils: whitening by its covariance would amplify the wrong sums."""
    found = example((96, 88), coils=8, noise=0.0, has_noise_scan=False)
    assert error(reconstruct(found.scan).image, found) < 0.02
    psi = estimate_whitening(found.scan).covariance
    assert np.count_nonzero(psi - np.diag(np.diag(psi))) == 0


def test_noise_units_do_not_depend_on_the_length_of_the_noise_scan() -> None:
    """Wishart correction n / (n - C) in the whitener: kappa and every chi-squared stay within a few per cent."""
    found = example(coils=8)
    rng = np.random.default_rng(3)
    long = reconstruct(found.scan).report
    values = []
    for _ in range(12):
        short = LabelledArray((0.02 * complex_normal(rng, (8, 32))).astype(np.complex64), ("coil", "sample"))
        report = reconstruct(replace(found.scan, noise_array=short), Settings(max_iterations=40)).report
        chi = report["consistency"]["reduced_chi_squared"]
        values.append((report["preparation"]["noise_units"]["kappa"], chi["value"], np.mean(chi["by_coil"])))
        assert "noise-short" in [finding["code"] for finding in report["findings"]]
    kappa, value, by_coil = np.mean(values, axis=0)
    expected = long["consistency"]["reduced_chi_squared"]
    assert kappa == pytest.approx(long["preparation"]["noise_units"]["kappa"], rel=0.06)
    assert value == pytest.approx(expected["value"], rel=0.12)
    assert by_coil == pytest.approx(np.mean(expected["by_coil"]), rel=0.12)


def test_adaptive_maps_of_frames_with_unequal_calibration() -> None:
    found = example(sizes={"frame": 2})
    mask = np.zeros((2, 48), np.bool_)
    mask[0, 16:32] = mask[1, 13:35] = True
    mask[:, ::3] = True
    scan = replace(found.scan, mask_array=LabelledArray(mask, ("frame", "ky")))
    result = reconstruct(scan, Settings(coil_maps="adaptive", max_iterations=20))
    assert np.isfinite(result.image).all()


def test_slices_without_an_object_do_not_dilute_noise_units() -> None:
    """Kappa is a mean over the object, wherever in the stack it is."""
    covariance = np.diag([1.0, 25.0, 1.0, 25.0]) * 0.02**2
    full = example(sizes={"slice": 3}, covariance=covariance)
    kspace = np.array(full.scan.kspace_array.data)
    rng = np.random.default_rng(0)
    noise = np.linalg.cholesky(covariance) @ complex_normal(rng, (4, 48 * 44))
    kspace[1:] = noise.reshape(4, 48, 44)
    mostly_empty = replace(
        full.scan, kspace_array=LabelledArray(kspace.astype(np.complex64), full.scan.kspace_array.labels)
    )
    kappas = [
        reconstruct(scan, Settings(max_iterations=3)).report["preparation"]["noise_units"]["kappa"]
        for scan in (full.scan, mostly_empty)
    ]
    assert kappas[1] == pytest.approx(kappas[0], rel=0.03)


def test_missing_end_of_every_readout_is_seen() -> None:
    """Zeros throughout one end of all readouts: not sampled when inferring, a finding when the mask says otherwise."""
    found = example()
    kspace = np.array(found.scan.kspace_array.data)
    kspace[..., :15] = 0
    short = LabelledArray(kspace, found.scan.kspace_array.labels)
    stated = inspect(replace(found.scan, kspace_array=short))
    assert "sampled-zeros" in [finding.code for finding in stated.findings]
    inferred = inspect(replace(found.scan, kspace_array=short, mask_array=None))
    assert "partial-echo" in [finding.code for finding in inferred.findings]
    assert inferred.sampling["varies_along_readout"]


@pytest.mark.parametrize(
    ("change", "code"),
    [
        ("silent-coil", "coil-silent-in-noise"),
        ("doubled-coil", "noise-clamped"),
        ("one-dwell-time", "dwell-time-incomplete"),
        ("faint", "maps-incomplete"),
    ],
)
def test_what_preparation_reports(change: str, code: str) -> None:
    found = example(noise=0.9 if change == "faint" else 0.02)
    scan = found.scan
    assert scan.noise_array is not None
    if change == "silent-coil":
        noise = np.array(scan.noise_array.data)
        noise[2] = 0
        scan = replace(scan, noise_array=LabelledArray(noise, ("coil", "sample")))
    elif change == "doubled-coil":
        assert scan.noise_array is not None
        noise = np.array(scan.noise_array.data)
        noise[2] = noise[1]
        scan = replace(scan, noise_array=LabelledArray(noise, ("coil", "sample")))
    elif change == "one-dwell-time":
        scan = replace(scan, noise_attributes={"sample_time_us": 4.0})
    report = reconstruct(scan, Settings(max_iterations=3)).report
    assert code in [finding["code"] for finding in report["findings"]]


def test_calm_scan_has_no_findings_of_preparation() -> None:
    codes = {finding["code"] for finding in reconstruct(example().scan).report["findings"]}
    assert not codes & {
        "noise-clamped",
        "noise-short",
        "dwell-time-incomplete",
        "maps-incomplete",
        "sampled-zeros",
    }


def test_short_reference_is_refused_at_submission() -> None:
    """The stored facts count the reference's columns as the job will."""
    scan = with_reference(example(attributes={"readout_oversampling": 2.0}), 1.0, columns=8)
    with pytest.raises(InvalidScan, match="16 x 4"):
        check_job(inspect(scan).as_dict(), Settings())


@pytest.mark.parametrize("dtype", [np.uint16, np.int32, np.float32])
def test_arrays_in_memory_are_checked_like_files(dtype: Any) -> None:
    with pytest.raises(InvalidScan, match="accepted are complex"):
        Scan(LabelledArray(np.ones((2, 8, 8), dtype), ("coil", "ky", "kx")))


@pytest.mark.parametrize("scale", [1e-20, 1e20])
def test_scales_beyond_single_precision_are_refused(scale: float) -> None:
    found = example()
    kspace = (np.asarray(found.scan.kspace_array.data) * scale).astype(np.complex64)
    with pytest.raises(InvalidScan, match="one factor"):
        inspect(replace(found.scan, kspace_array=LabelledArray(kspace, found.scan.kspace_array.labels)))


def test_nan_in_the_reference_is_refused_by_the_job_too() -> None:
    with pytest.raises(InvalidScan, match="/reference contains NaN or Inf"):
        reconstruct(with_reference(example(), float("nan")))


def test_image_may_not_overwrite_the_scan(tmp_path: Path) -> None:
    path = tmp_path / "scan.h5"
    write_scan(path, np.ones((1, 16, 16), np.complex64), ("coil", "ky", "kx"))
    with pytest.raises(InvalidScan, match="would overwrite the scan"):
        reconstruct_file(path, path)
