"""Analytic k-space of ellipses against rasters, theorems and the published table."""

from __future__ import annotations

import numpy as np
import pytest

from recon.phantom import (
    Ellipse,
    SmoothMap,
    ellipse_kspace,
    ellipse_spectrum,
    pixel_centres,
    rasterise,
    ring_coils,
    shepp_logan,
    wave_phase,
)


def centred_fft(image: np.ndarray) -> np.ndarray:
    """Return the unitary FFT with the origin at index n // 2, by numpy alone."""
    return np.fft.fftshift(np.fft.fft2(np.fft.ifftshift(image, axes=(-2, -1)), norm="ortho"), axes=(-2, -1))


def relative(difference: np.ndarray, reference: np.ndarray) -> float:
    return float(np.linalg.norm(difference) / np.linalg.norm(reference))


def raster_kspace(ellipses: tuple[Ellipse, ...], n: int, refinement: int) -> np.ndarray:
    """Return the central n x n k-space of an object rasterised `refinement` times as finely."""
    big = n * refinement
    start = big // 2 - n // 2
    central = centred_fft(rasterise(ellipses, (big, big)))[start : start + n, start : start + n]
    return central / refinement


@pytest.mark.parametrize("n", [32, 33])
def test_kspace_is_the_limit_of_refined_rasters(n: int) -> None:
    """Source: Van de Walle et al. 1997 (analytic MR data of ellipses); the table of Shepp & Logan 1974."""
    exact = ellipse_kspace(shepp_logan(), (n, n))
    errors = [relative(raster_kspace(shepp_logan(), n, r) - exact, exact) for r in (4, 16, 64)]
    assert errors[2] < 1e-3
    assert errors[0] > 3 * errors[1] > 9 * errors[2]


def test_dc_is_the_area_times_the_value() -> None:
    """Source: the central ordinate theorem (Bracewell): the transform at zero is the integral."""
    ellipse = Ellipse(3.0, (0.2, -0.1), (0.3, 0.15), 40)
    dc = ellipse_spectrum([ellipse], np.zeros(1), np.zeros(1))[0, 0]
    assert dc == pytest.approx(3.0 * np.pi * 0.3 * 0.15, rel=1e-12)
    kspace = ellipse_kspace([ellipse], (20, 31))
    assert kspace[10, 15] == pytest.approx(dc * np.sqrt(20 * 31) / 4, rel=1e-12)


def test_shift_theorem_with_y_along_rows_and_x_along_columns() -> None:
    """Source: Bracewell, shift theorem. A shift by whole pixels is an exact phase ramp."""
    shape = (24, 17)
    still = ellipse_kspace([Ellipse(1, (0, 0), (0.4, 0.2), 25)], shape)
    moved = ellipse_kspace([Ellipse(1, (2 * 2 / 17, -3 * 2 / 24), (0.4, 0.2), 25)], shape)
    ky, kx = np.arange(24) - 12, np.arange(17) - 8
    ramp = np.exp(-2j * np.pi * 2 * kx / 17)[None, :] * np.exp(2j * np.pi * 3 * ky / 24)[:, None]
    np.testing.assert_allclose(moved, still * ramp, atol=1e-12)


def test_similarity_and_rotation() -> None:
    """Source: Bracewell, similarity theorem; the transform turns with the object."""
    k = np.linspace(-6, 6, 13)
    disc = ellipse_spectrum([Ellipse(1, (0, 0), (1, 1))], np.zeros(1), k)[0]
    half = ellipse_spectrum([Ellipse(1, (0, 0), (0.5, 0.25))], np.zeros(1), 2 * k)[0]
    np.testing.assert_allclose(half, 0.125 * disc, atol=1e-13)
    upright = ellipse_spectrum([Ellipse(1, (0, 0), (0.6, 0.2), 90)], k, np.zeros(1))[:, 0]
    lying = ellipse_spectrum([Ellipse(1, (0, 0), (0.6, 0.2), 0)], np.zeros(1), k)[0]
    np.testing.assert_allclose(upright, lying, atol=1e-13)


def test_inverse_fft_shows_the_object_at_the_pixel_centres() -> None:
    """Source: unitary scaling: values inside are those of the object (Gibbs ringing apart)."""
    kspace = ellipse_kspace([Ellipse(2.0, (0.1, 0.2), (0.5, 0.4), 30)], (128, 96))
    image = np.fft.fftshift(np.fft.ifft2(np.fft.ifftshift(kspace), norm="ortho"))
    truth = rasterise([Ellipse(2.0, (0.1, 0.2), (0.5, 0.4), 30)], (128, 96))
    inner = rasterise([Ellipse(1.0, (0.1, 0.2), (0.35, 0.25), 30)], (128, 96)).real > 0
    np.testing.assert_allclose(image[inner], truth[inner], rtol=0.06)
    assert abs(image[inner].mean() - 2) < 2e-3


def test_maps_and_phase_keep_kspace_exact() -> None:
    """Source: Bracewell, shift theorem. Against the object times its maps on a raster 24 times as fine."""
    ellipses = (Ellipse(1.0, (0.05, -0.1), (0.6, 0.45), 20), Ellipse(-0.4, (0.2, 0.1), (0.2, 0.1), -50))
    n, refinement = 20, 24
    maps = [coil * wave_phase(0.5, (1, -1), 0.3) for coil in ring_coils(3)]
    exact = ellipse_kspace(ellipses, (n, n), maps=maps)
    big = n * refinement
    start = big // 2 - n // 2
    raster = rasterise(ellipses, (big, big), supersampling=2)
    for kspace, smooth in zip(exact, maps, strict=True):
        fine = centred_fft(raster * smooth.on_grid((big, big))) / refinement
        central = fine[start : start + n, start : start + n]
        assert relative(central - kspace, kspace) < 2e-3


def test_a_product_of_maps_is_the_product_of_their_values() -> None:
    coil, phase = ring_coils(4)[1], wave_phase(0.7, (2, 1), 0.2)
    np.testing.assert_allclose(
        (coil * phase).on_grid((9, 14)), coil.on_grid((9, 14)) * phase.on_grid((9, 14)), atol=1e-13
    )


def test_ring_coils_are_one_at_the_coil_and_follow_their_formula() -> None:
    (coil,) = ring_coils(1, distance=1.2, sharpness=3)
    x, y = pixel_centres(12)[None, :], pixel_centres(10)[:, None]
    coil_x, coil_y = -1.2, 0.0  # a single coil stands at half a turn
    expected = -((np.cos(np.pi * (x - coil_x) / 4) * np.cos(np.pi * (y - coil_y) / 4)) ** 6)
    np.testing.assert_allclose(coil.on_grid((10, 12)), expected, atol=1e-13)


def test_shepp_logan_values_of_the_table() -> None:
    """Source: Shepp & Logan 1974: skull 2, brain 1.02, ventricles 1.00; modified: 1, 0.2, 0 (Toft 1996)."""
    for contrast, skull, brain, ventricle in (("original", 2.0, 1.02, 1.0), ("modified", 1.0, 0.2, 0.0)):
        picture = rasterise(shepp_logan(contrast), (201, 201)).real  # type: ignore[arg-type]
        assert picture[100 + 91, 100] == pytest.approx(skull)  # y = 0.905, between skull's two outlines
        assert picture[100 - 30, 100 + 40] == pytest.approx(brain)
        assert picture[100, 100 + 22] == pytest.approx(ventricle)
        assert picture[100, 100 - 22] == pytest.approx(ventricle)
        assert picture[0, 0] == 0


def test_raster_centres() -> None:
    dot = [Ellipse(1.0, (0, 0), (0.3, 0.3))]
    middle = rasterise(dot, (8, 8), centre="middle").real
    np.testing.assert_array_equal(middle, middle[::-1, ::-1])
    at_dc = rasterise(dot, (8, 8)).real
    np.testing.assert_array_equal(at_dc[1:, 1:], at_dc[1:, 1:][::-1, ::-1])
    assert list(at_dc[4, 4:7]) == [1, 1, 0]


def test_supersampled_raster_holds_the_area() -> None:
    ellipse = Ellipse(1.0, (0.013, -0.021), (0.4, 0.3), 10)
    area = rasterise([ellipse], (40, 40), supersampling=16).real.sum() * (2 / 40) ** 2
    assert area == pytest.approx(np.pi * 0.4 * 0.3, rel=3e-4)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Ellipse(1, (0, 0), (0.0, 1.0)), "two positive numbers"),
        (lambda: SmoothMap(np.ones((2, 2), complex)), "odd size"),
        (lambda: SmoothMap(np.ones((3, 5), complex)), "odd size"),
        (lambda: ring_coils(0), "1 or more"),
        (lambda: rasterise([], (4, 4), supersampling=0), "1 or more"),
        (lambda: shepp_logan("sharp"), "'original' or"),  # type: ignore[arg-type]
    ],
)
def test_refused_arguments_say_what_to_give(make, message: str) -> None:  # type: ignore[no-untyped-def]
    with pytest.raises(ValueError, match=message):
        make()
