"""Dead coils and spikes: always reported, left out on request alone."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.errors import InvalidScan, InvalidSettings
from recon.exclusion import Excluded, without_coils
from recon.inspection import inspect
from recon.levels import ChannelLevels
from recon.pipeline import reconstruct
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings, parse_settings
from tests.recon.helpers import complex_normal
from tests.recon.scans import Example, error, example
from tests.recon.volumes import volume

SPIKES = ((10, 36), (38, 5), (12, 9))


def codes(report: dict[str, Any]) -> dict[str, dict[str, Any]]:
    return {finding["code"]: finding for finding in report["findings"]}


def with_dead_coil(scan: Scan, coil: int, level: float) -> Scan:
    """The scan with one coil delivering `level` of what it did."""
    kspace = np.array(scan.kspace_array.data)
    kspace[..., coil, :, :] *= level
    noise = None
    if scan.noise_array is not None:
        values = np.array(scan.noise_array.data)
        values[coil] *= level
        noise = LabelledArray(values, scan.noise_array.labels)
    return replace(scan, kspace_array=LabelledArray(kspace, scan.kspace_array.labels), noise_array=noise)


def with_spikes(found: Example, size: float = 30.0) -> Scan:
    kspace = np.array(found.scan.kspace_array.data)
    for row, column in SPIKES:
        kspace[..., row, column] += size
    return replace(found.scan, kspace_array=LabelledArray(kspace, found.scan.kspace_array.labels))


@pytest.mark.parametrize("level", [0.0, 1e-4, 0.01])
def test_dead_coil_is_reported_and_left_out_on_request(level: float) -> None:
    """Without it the scan is that of the other coils, to the bit."""
    found = example()
    scan = with_dead_coil(found.scan, 1, level)
    kept = reconstruct(scan, Settings(max_iterations=30)).report
    assert codes(kept)["dead-coil"]["where"] == "coil 1"
    assert "excluded" not in codes(kept)
    assert kept["preparation"]["excluded"] == {"dead_coils": [], "spikes": 0}
    result = reconstruct(scan, parse_settings({"exclude": ["dead-coils"]}))
    kspace, noise = (
        np.delete(np.asarray(a.data), 1, axis=0) for a in (scan.kspace_array, scan.noise_array) if a
    )
    others = replace(
        scan,
        kspace_array=LabelledArray(kspace, scan.kspace_array.labels),
        noise_array=LabelledArray(noise, ("coil", "sample")),
    )
    expected = reconstruct(others)
    np.testing.assert_array_equal(result.image, expected.image)
    assert result.report["preparation"]["excluded"] == {"dead_coils": [1], "spikes": 0}
    assert {"dead-coil", "excluded"} <= set(codes(result.report))
    by_coil = result.report["consistency"]["reduced_chi_squared"]["by_coil"]
    others_by_coil = expected.report["consistency"]["reduced_chi_squared"]["by_coil"]
    assert by_coil == [others_by_coil[0], None, *others_by_coil[1:]]


def test_dead_coil_without_a_noise_scan() -> None:
    found = example(has_noise_scan=False, every=1)
    assert "dead-coil" in [f.code for f in inspect(with_dead_coil(found.scan, 3, 0.0)).findings]
    assert "dead-coil" not in [f.code for f in inspect(with_dead_coil(found.scan, 3, 0.05)).findings]


def test_far_coils_and_low_gains_are_not_dead() -> None:
    """Loops differ tenfold in signal, and receivers tenfold in gain."""
    rng = np.random.default_rng(0)
    signal = np.array([1.0, 0.1, 3.0, 0.3])
    levels = ChannelLevels(4)
    levels.see(
        signal[:, np.newaxis, np.newaxis] * complex_normal(rng, (4, 20, 20)), np.ones((20, 20), np.bool_)
    )
    assert levels.judge(np.array([[1.0], [0.1], [0.3], [3.0]]) * complex_normal(rng, (4, 500))).dead == ()


def test_coil_silent_in_noise_alone_does_not_distort_noise_units() -> None:
    """It gets the median noise of the others: kappa and image stay what they were."""
    found = example()
    assert found.scan.noise_array is not None
    noise = np.array(found.scan.noise_array.data)
    noise[2] = 0
    scan = replace(found.scan, noise_array=LabelledArray(noise, ("coil", "sample")))
    expected, result = reconstruct(found.scan), reconstruct(scan)
    finding = codes(result.report)["coil-silent-in-noise"]
    assert "Coil 2 delivers signal but no noise" in finding["message"]
    assert "noise-clamped" not in codes(result.report)
    kappas = [each.report["preparation"]["noise_units"]["kappa"] for each in (expected, result)]
    assert kappas[1] == pytest.approx(kappas[0], rel=0.02)
    assert error(result.image, found) < 1.05 * error(expected.image, found)


def test_silent_coil_is_still_the_right_one_when_a_dead_one_goes() -> None:
    found = example(coils=6)
    scan = with_dead_coil(found.scan, 1, 0.0)
    assert scan.noise_array is not None
    noise = np.array(scan.noise_array.data)
    noise[4] = 0
    scan = replace(scan, noise_array=LabelledArray(noise, ("coil", "sample")))
    result = reconstruct(scan, parse_settings({"exclude": ["dead-coils"]}))
    assert "noise-clamped" not in codes(result.report)
    assert error(result.image, found) < 0.25  # a sixth of the coils is missing from the truth


def test_spikes_are_reported_and_left_out_on_request() -> None:
    """With them the image has stripes; without, it is nearly that of the clean scan."""
    found = example(every=1, noise=0.05)
    scan = with_spikes(found)
    clean, kept = reconstruct(found.scan), reconstruct(scan)
    finding = codes(kept.report)["spike"]
    assert finding["numbers"] == {"samples": 3, "planes": 1}
    assert finding["where"] == "ky 10, kx 36"
    result = reconstruct(scan, parse_settings({"exclude": ["spikes"]}))
    assert result.report["preparation"]["excluded"] == {"dead_coils": [], "spikes": 3}
    assert {"spike", "excluded"} <= set(codes(result.report))
    assert error(kept.image, found) > 3 * error(clean.image, found)
    assert error(result.image, found) < 1.3 * error(clean.image, found)
    samples = result.report["consistency"]["reduced_chi_squared"]["samples"]
    assert samples == 4 * (48 * 44 - 3 * 3)
    assert "readout-undersampled" not in codes(result.report)


def test_nothing_to_leave_out_changes_nothing() -> None:
    found = example()
    plain = reconstruct(found.scan, Settings(max_iterations=20))
    asked = reconstruct(
        found.scan, parse_settings({"max_iterations": 20, "exclude": ["spikes", "dead-coils"]})
    )
    np.testing.assert_array_equal(asked.image, plain.image)
    assert asked.report["findings"] == plain.report["findings"]
    assert asked.report["settings"]["exclude"] == ["dead-coils", "spikes"]


def test_spike_in_one_average_leaves_the_others() -> None:
    found = example(every=1, noise=0.05)
    data = np.asarray(found.scan.kspace_array.data)
    kspace = np.stack([data, data, data])
    kspace[1, :, 10, 36] += 30
    scan = replace(found.scan, kspace_array=LabelledArray(kspace, ("average", "coil", "ky", "kx")))
    where = codes(inspect(scan).as_dict())["spike"]["where"]
    assert where == "average 1, ky 10, kx 36"
    counts = replace(scan, drops_spikes=True).samples(PlaneIndex()).counts
    assert counts[10, 35:38].tolist() == [2, 2, 2]
    assert counts.sum() == 3 * 48 * 44 - 3


def test_spikes_with_readout_oversampling() -> None:
    """Readouts with a gap cannot be cropped before the solve: the image is."""
    found = example(attributes={"readout_oversampling": 2.0}, noise=0.05)
    scan = with_spikes(found)
    assert "spike" in codes(inspect(scan).as_dict())
    result = reconstruct(scan, parse_settings({"exclude": ["spikes"]}))
    assert result.image.shape == (48, 44)
    assert error(result.image, found) < 1.5 * error(reconstruct(found.scan).image, found)
    maps = LabelledArray(np.ones((4, 48, 44), np.complex64), ("coil", "y", "x"))
    with pytest.raises(InvalidScan, match="supply maps with 88 columns"):
        reconstruct(replace(scan, sensitivity_array=maps), parse_settings({"exclude": ["spikes"]}))


def test_volumes_lose_whole_lines_and_whole_coils() -> None:
    found = volume()
    kspace = found.kspace.copy()
    kz, ky = (int(n) for n in np.argwhere(found.mask)[3])
    kspace[:, kz, ky, -4] += 10
    kspace[1] = 0
    scan = replace(found.scan, kspace_array=LabelledArray(kspace, ("coil", "kz", "ky", "kx")))
    report = reconstruct(
        scan, parse_settings({"exclude": ["spikes", "dead-coils"], "max_iterations": 5})
    ).report
    assert report["preparation"]["excluded"] == {"dead_coils": [1], "spikes": 1}
    assert f"kz {kz}, ky {ky}, kx {kspace.shape[3] - 4}" in codes(report)["spike"]["message"]
    assert "dead-coil" in codes(report)


def test_view_without_coils_reads_like_the_arrays() -> None:
    found = example(coils=5)
    view = without_coils(found.scan, [0, 3])
    whole = found.scan.kspace(PlaneIndex())
    np.testing.assert_array_equal(view.kspace(PlaneIndex()), whole[[1, 2, 4]])
    np.testing.assert_array_equal(view.kspace_array.take(coil=2), whole[4])
    assert view.coils == 3
    assert Excluded((0, 3)).renumbered([1, 3, 4]) == [0, 2]
    assert Excluded((0, 3)).with_gaps([1.0, 2.0, 4.0]) == [None, 1.0, 2.0, None, 4.0]


def test_too_many_virtual_coils_for_what_is_left() -> None:
    scan = with_dead_coil(example().scan, 1, 0.0)
    with pytest.raises(InvalidSettings, match="4 coils for a scan with 3"):
        reconstruct(scan, parse_settings({"exclude": ["dead-coils"], "coil_compression": {"coils": 4}}))


@pytest.mark.parametrize("value", ["spikes", ["spike"], [1], None, {"spikes": True}])
def test_bad_values_are_refused(value: Any) -> None:
    with pytest.raises(InvalidSettings, match=r"any of dead-coils, spikes"):
        parse_settings({"exclude": value})


def test_order_and_repetition_do_not_matter() -> None:
    settings = parse_settings({"exclude": ["spikes", "dead-coils", "spikes"]})
    assert settings.exclude == ("dead-coils", "spikes")
    assert settings.model_dump(mode="json")["exclude"] == ["dead-coils", "spikes"]
