"""Cycle spinning and constraints in the solver, and the phase that is taken out for them."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Literal

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.errors import InvalidScan, InvalidSettings
from recon.operators.encoding import Encoding
from recon.operators.wavelet import Wavelet
from recon.phantom import Ellipse, rasterise
from recon.phase import remove_phase
from recon.pipeline import reconstruct
from recon.scan import Scan
from recon.settings import Settings, parse_settings
from recon.shifts import shift_set
from recon.solver import solve
from recon.statement import Problem
from tests.recon.general import constrained_optimum
from tests.recon.helpers import Array, coil_maps, complex_normal, nrmse, numpy_transform
from tests.recon.scans import example

Kind = Literal["plane", "series", "volume"]


def small_problem(kind: Kind, shape: tuple[int, ...], **fields: Any) -> Problem:
    """Return a noisy two-coil problem of a block that is partly negative, with a smooth phase where constrained."""
    rng = np.random.default_rng(21)
    picture = np.zeros(shape, np.complex128)
    picture[..., 2:7, 3:6] = 5
    picture[..., 4:6, 4:8] = -1.5
    rows = np.arange(shape[-2])[:, np.newaxis]
    phase = np.exp(0.6j + 0.08j * rows) * np.ones(shape)
    maps = coil_maps(2, (shape[-2], shape[-1]))
    if kind != "plane":
        maps = np.repeat(maps[:, np.newaxis], 1 if kind == "series" else shape[0], axis=1)
    mask = rng.random((*shape[:-1], 1)) < 0.6
    mask[..., shape[-2] // 2 - 1 : shape[-2] // 2 + 2, :] = True
    encoding = Encoding(
        maps.astype(np.complex128), np.broadcast_to(mask, shape), "series" if kind == "series" else "volume"
    )
    data = encoding.forward(picture * phase) + complex_normal(rng, encoding.range_shape) * mask
    if fields.get("constraint", "none") != "none":
        encoding = encoding.absorb(phase)
    return Problem(encoding, data, "haar", 0.4, 0.2, **fields)


@pytest.mark.parametrize(
    ("kind", "shape", "fields"),
    [
        ("plane", (16, 16), {"wavelet_shifts": 2}),
        ("plane", (13, 15), {"wavelet_shifts": 4}),
        ("plane", (16, 16), {"constraint": "real"}),
        ("plane", (13, 15), {"constraint": "nonnegative", "wavelet_shifts": 2}),
        ("series", (2, 8, 10), {"constraint": "nonnegative"}),
        ("series", (2, 8, 10), {"constraint": "real", "wavelet_shifts": 2}),
        ("volume", (4, 8, 9), {"constraint": "nonnegative", "wavelet_shifts": 2}),
    ],
)
def test_optimum_equals_that_of_a_general_convex_solver(
    kind: Kind, shape: tuple[int, ...], fields: dict[str, Any]
) -> None:
    """Source: CVXPY with an interior-point method, to 1e-5 relative."""
    problem = small_problem(kind, shape, **fields)
    ours = solve(problem, tolerance=1e-7, max_iterations=30_000)
    assert ours.stop_reason == "optimal"
    assert ours.objective[-1] == pytest.approx(constrained_optimum(problem), rel=1e-5)
    if problem.constraint != "none":
        assert not ours.image.imag.any()
    if problem.constraint == "nonnegative":
        assert ours.image.real.min() == 0
        free = solve(replace(problem, constraint="real"), tolerance=1e-3, max_iterations=3000)
        assert free.image.real.min() < -0.2


def partial_fourier(
    rng: np.random.Generator, shape: tuple[int, int] = (96, 96)
) -> tuple[Array, Array, Array, Array]:
    """Return truth with a smooth phase, maps, a 5/8 mask with every second line in the far part, and noisy samples."""
    picture = rasterise(
        [
            Ellipse(20, (0, 0), (0.7, 0.8)),
            Ellipse(-8, (0.2, 0.1), (0.2, 0.3), 20),
            Ellipse(9, (-0.3, -0.2), (0.1, 0.1)),
        ],
        shape,
        supersampling=4,
    ).real
    y, x = np.mgrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
    truth = picture * np.exp(1j * (0.4 + 0.9 * y - 0.7 * x + 0.5 * x * y))
    maps = coil_maps(4, shape)
    maps = maps / np.sqrt((np.abs(maps) ** 2).sum(axis=0))
    mask = np.zeros(shape, np.bool_)
    start = shape[0] * 3 // 8
    mask[start : 5 * shape[0] // 8] = True
    mask[5 * shape[0] // 8 :: 2] = True
    kspace = (numpy_transform(maps * truth) + complex_normal(rng, (4, *shape))) * mask
    return truth, maps, mask, kspace.astype(np.complex64)


def scan_of(kspace: Array, mask: Array, maps: Array | None = None) -> Scan:
    sensitivity = None if maps is None else LabelledArray(maps.astype(np.complex64), ("coil", "y", "x"))
    noise = complex_normal(np.random.default_rng(1), (len(kspace), 2048)).astype(np.complex64)
    return Scan(
        LabelledArray(kspace, ("coil", "ky", "kx")),
        mask_array=LabelledArray(mask, ("ky", "kx")),
        noise_array=LabelledArray(noise, ("coil", "sample")),
        sensitivity_array=sensitivity,
    )


def test_low_resolution_phase_is_that_of_the_object() -> None:
    """Source: common practice, no source: a phase that is smooth at the block's resolution is found."""
    truth, maps, mask, kspace = partial_fourier(np.random.default_rng(3))
    encoding = Encoding(maps.astype(np.complex64), mask)
    found = remove_phase(encoding, encoding.to_range(kspace)).phase
    assert found is not None
    np.testing.assert_allclose(np.abs(found), 1, atol=1e-5)
    inside = np.abs(truth) > 10
    assert np.sqrt(np.mean(np.angle(found * truth.conj())[inside] ** 2)) < 0.08


def test_real_constraint_pays_with_partial_fourier_and_gives_the_phase_back() -> None:
    """Source: Noll, Nishimura & Macovski 1991: with the phase known, missing k-space follows by symmetry."""
    truth, maps, mask, kspace = partial_fourier(np.random.default_rng(4))
    scan, inside = scan_of(kspace, mask, maps), np.abs(truth) > 0.5
    errors = {}
    for constraint in ("none", "real", "nonnegative"):
        settings = Settings(constraint=constraint, wavelet_strength=0.1, tv_strength=0.1)
        image = reconstruct(scan, settings).image
        errors[constraint] = nrmse(image[inside], truth[inside])
        assert np.sqrt(np.mean(np.angle(image * truth.conj())[np.abs(truth) > 10] ** 2)) < 0.1
    assert errors["real"] < 0.85 * errors["none"]
    assert errors["nonnegative"] < 1.02 * errors["real"]


def test_tikhonov_takes_the_real_constraint() -> None:
    truth, maps, mask, kspace = partial_fourier(np.random.default_rng(5), (48, 48))
    scan, inside = scan_of(kspace, mask, maps), np.abs(truth) > 0.5
    images = [
        reconstruct(scan, Settings(method="tikhonov", tikhonov_strength=0.05, constraint=c)).image
        for c in ("none", "real")
    ]
    free, real = (nrmse(image[inside], truth[inside]) for image in images)
    assert real < 0.95 * free


def test_series_and_joint_volumes_take_the_constraint() -> None:
    """Every frame has a phase of its own; of a volume the phase is that of the volume."""
    rng = np.random.default_rng(6)
    truth, maps, mask, _ = partial_fourier(rng, (32, 32))
    turned = truth * np.exp(1j)
    frames = np.stack([truth, turned])
    kspace = (numpy_transform(maps[:, np.newaxis] * frames) + complex_normal(rng, (4, 2, 32, 32))) * mask
    maps_array = LabelledArray(maps.astype(np.complex64), ("coil", "y", "x"))
    series = Scan(
        LabelledArray(kspace.astype(np.complex64), ("coil", "frame", "ky", "kx")),
        mask_array=LabelledArray(mask, ("ky", "kx")),
        sensitivity_array=maps_array,
    )
    fixed: dict[str, Any] = {"constraint": "real", "wavelet_strength": 0.1, "tv_strength": 0.1}
    image = reconstruct(series, Settings(temporal_strength=0.2, **fixed)).image
    for found, frame in zip(image, frames, strict=True):
        inside = np.abs(frame) > 10
        assert np.sqrt(np.mean(np.angle(found * frame.conj())[inside] ** 2)) < 0.25
    slabs = np.stack([truth * (0.5 + 0.1 * k) for k in range(10)])
    volume_mask = np.broadcast_to(mask[:, :1], (10, 32, 1)).copy()
    centred = np.fft.fftshift(np.fft.fft(np.fft.ifftshift(slabs, axes=0), axis=0, norm="ortho"), axes=0)
    volume_kspace = numpy_transform(maps[:, np.newaxis] * centred) * volume_mask
    volume = Scan(
        LabelledArray(volume_kspace.astype(np.complex64), ("coil", "kz", "ky", "kx")),
        mask_array=LabelledArray(volume_mask[..., 0], ("kz", "ky")),
    )
    image = reconstruct(
        volume, Settings(volume="joint", **{**fixed, "wavelet_strength": 0.002, "tv_strength": 0.002})
    ).image
    free = reconstruct(volume, Settings(volume="joint", wavelet_strength=0.002, tv_strength=0.002)).image
    inside = np.abs(slabs) > 5
    assert nrmse(np.abs(image)[inside], np.abs(slabs)[inside]) < nrmse(
        np.abs(free)[inside], np.abs(slabs)[inside]
    )


def test_images_that_are_not_negative_converge_in_good_time() -> None:
    found = example((96, 90), coils=6, every=3, noise=0.02)
    settings = {"constraint": "nonnegative", "wavelet_strength": 0.08, "tv_strength": 0.12}
    report = reconstruct(found.scan, parse_settings(settings)).report
    # one dual step for each iteration takes 227 of them, three take 77
    assert report["solver"]["iterations"] < 120
    assert report["solver"]["converged_planes"] == 1


def test_no_phase_information_is_refused() -> None:
    _, maps, _, kspace = partial_fourier(np.random.default_rng(7), (48, 48))
    mask = np.zeros((48, 48), np.bool_)
    mask[::2] = True
    with pytest.raises(
        InvalidScan, match=r"the fully sampled centre of k-space is 1 samples.*constraint to none"
    ):
        reconstruct(scan_of(kspace * mask, mask, maps), Settings(constraint="real"))


@pytest.mark.parametrize(
    ("fields", "pointer"),
    [
        ({"constraint": "positive"}, "/constraint"),
        ({"wavelet_shifts": 0}, "/wavelet_shifts"),
        ({"wavelet_shifts": 2.0}, "/wavelet_shifts"),
    ],
)
def test_values_out_of_range_are_refused(fields: dict[str, Any], pointer: str) -> None:
    with pytest.raises(InvalidSettings) as refusal:
        parse_settings(fields)
    assert refusal.value.errors[0]["pointer"] == pointer


@pytest.mark.parametrize(
    "fields",
    [
        {"method": "zero-filled", "constraint": "real"},
        {"method": "tikhonov", "constraint": "nonnegative"},
        {"map_sets": 2, "constraint": "real"},
    ],
)
def test_methods_that_cannot_hold_a_constraint_refuse_it(fields: dict[str, Any]) -> None:
    _, _, mask, kspace = partial_fourier(np.random.default_rng(8), (48, 48))
    with pytest.raises(InvalidSettings) as refusal:
        reconstruct(scan_of(kspace, mask), Settings(**fields))
    assert refusal.value.errors[0]["pointer"] == "/constraint"


def test_shifts_differ_on_every_level_and_end_at_the_coarsest() -> None:
    wavelet = Wavelet((256, 256), "db4")
    shifts = shift_set(wavelet, 16)
    assert shifts[0] == (0, 0)
    for level in range(1, wavelet.levels + 1):
        assert len({a % 2**level for a, _ in shifts[: 2**level]}) == 2**level
    assert len(shift_set(Wavelet((16, 16), "haar"), 16)) == 2 ** Wavelet((16, 16), "haar").levels


def test_a_warm_start_may_come_from_other_shifts_and_no_constraint() -> None:
    free = small_problem("plane", (16, 16), wavelet_shifts=2)
    start = solve(free, tolerance=1e-4, max_iterations=2000)
    problem = replace(free, wavelet_shifts=4, constraint="nonnegative")
    warm = solve(problem, tolerance=1e-6, max_iterations=5000, start=start)
    cold = solve(problem, tolerance=1e-6, max_iterations=5000)
    assert warm.objective[-1] == pytest.approx(cold.objective[-1], rel=1e-5)
    again = solve(problem, tolerance=1e-5, max_iterations=5000, start=cold)
    assert again.iterations < cold.iterations / 4
