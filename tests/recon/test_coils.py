"""Calibration region, coil maps, compression, combination."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from recon.coils.adaptive import adaptive_maps
from recon.coils.calibration import central_block, check_block
from recon.coils.combination import root_sum_of_squares, sensitivity_weighted
from recon.coils.compression import Compression
from recon.coils.eigenvector import EigenvectorMaps, eigenvector_maps
from recon.coils.grids import interpolate
from recon.coils.noise import whitening_from
from recon.errors import CalibrationMissing, InvalidSettings
from recon.phantom import Ellipse, SmoothMap, ellipse_kspace, rasterise, ring_coils, wave_phase
from recon.settings import KeepCoils, KeepEnergy
from tests.recon.helpers import Array, coil_maps, complex_normal, line_mask
from tests.recon.test_noise import covariance, draw

HEAD = (
    Ellipse(1.0, (0.02, -0.03), (0.7, 0.8), 10),
    Ellipse(-0.5, (0.2, 0.1), (0.25, 0.3)),
    Ellipse(0.4, (-0.3, -0.2), (0.2, 0.15), 40),
)


def calibration(coils: int, side: int, noise: float = 0.0) -> tuple[Array, list[SmoothMap]]:
    """Return the analytic calibration block of an object with phase, and its maps."""
    maps = ring_coils(coils)
    phase = wave_phase(0.6, (1, 1), 0.4)
    kspace = ellipse_kspace(HEAD, (64, 60), maps=[m * phase for m in maps])
    top, left = 32 - side // 2, 30 - side // 2
    block = kspace[:, top : top + side, left : left + side]
    return block + noise * complex_normal(np.random.default_rng(0), block.shape), maps


def first(found: EigenvectorMaps) -> tuple[Array, Array]:
    """Return the first set of maps and its eigenvalue."""
    return found.sets[0], found.eigenvalues[0]


def alignment(found: Array, true: Array) -> Array:
    """Return |<found, true>| / (|found| |true|) at every pixel."""
    size = np.linalg.norm(found, axis=0) * np.linalg.norm(true, axis=0)
    cosine: Array = np.abs(np.sum(found.conj() * true, axis=0)) / np.where(size > 0, size, 1)
    return cosine


@given(st.integers(1, 9), st.integers(1, 9), st.integers(0, 2**32 - 1), st.floats(0.3, 1))
def test_central_block_is_the_best_centred_rectangle(
    rows: int, columns: int, seed: int, density: float
) -> None:
    """Against trying every rectangle: index n // 2 of the matrix becomes index size // 2 of the block."""
    mask = np.random.default_rng(seed).random((rows, columns)) < density
    best = 0
    for height in range(1, rows + 1):
        for width in range(1, columns + 1):
            top, left = rows // 2 - height // 2, columns // 2 - width // 2
            if mask[top : top + height, left : left + width].all():
                best = max(best, min(height, width) * height * width)
    height, width = central_block(mask)
    assert min(height, width) * height * width == best
    if best:
        top, left = rows // 2 - height // 2, columns // 2 - width // 2
        assert mask[top : top + height, left : left + width].all()


def test_calibration_region_of_lines_and_its_absence() -> None:
    assert central_block(line_mask(64, 60, every=4, calibration=20)) == (20, 60)
    gappy = np.repeat((np.arange(64) % 2 == 0)[:, None], 60, axis=1)
    with pytest.raises(CalibrationMissing, match="at least 8 x 8"):
        check_block(*central_block(gappy), (64, 60), "the mask")
    check_block(5, 5, (5, 5), "a matrix smaller than any calibration region")


@pytest.mark.parametrize(("coils", "side"), [(8, 24), (4, 17), (32, 20)])
def test_eigenvalue_is_one_inside_the_object_and_maps_are_the_true_ones(coils: int, side: int) -> None:
    """Source: Uecker et al. 2014: the true maps are eigenvectors to eigenvalue one where there is signal."""
    block, true = calibration(coils, side, noise=1e-3)
    reference = np.ones(coils) / math.sqrt(coils)
    maps, eigenvalue = first(eigenvector_maps([block], (64, 60), reference, has_noise_units=False))
    inside = rasterise([Ellipse(1, (0.02, -0.03), (0.66, 0.76), 10)], (64, 60)).real > 0
    outside = rasterise([Ellipse(1, (0.02, -0.03), (0.95, 1.05), 10)], (64, 60)).real == 0
    assert eigenvalue[inside].min() > 0.97
    assert eigenvalue.max() < 1.0001
    assert np.median(eigenvalue[outside]) < 0.9
    on_grid = np.stack([m.on_grid((64, 60)) for m in true])
    assert np.quantile(alignment(maps, on_grid)[inside], 0.01) > 0.995
    np.testing.assert_allclose(np.linalg.norm(maps, axis=0)[inside], 1, atol=1e-5)


@pytest.mark.parametrize(("coarse", "fine"), [(40, 97), (41, 96), (40, 120), (33, 33)])
def test_interpolated_maps_stay_centred(coarse: int, fine: int) -> None:
    """Linear interpolation of a wave is off by (2 pi / m)^2 / 8; half a pixel's shift by 20 times that."""

    def wave(n: int) -> Array:
        r = (np.arange(n) - n // 2) / n
        return np.asarray(np.exp(2j * np.pi * r)[:, None] * np.exp(-2j * np.pi * r)[None, :])

    found = interpolate(wave(coarse)[None], (fine, fine))[0]
    assert np.abs(found - wave(fine)).max() < 2 * (2 * np.pi / coarse) ** 2 / 8 + 1e-12


@pytest.mark.parametrize("shape", [(61, 57), (121, 101)])
def test_maps_of_a_point_symmetric_scan_are_point_symmetric(shape: tuple[int, int]) -> None:
    """The origin is the centre of pixel n // 2 for maps too: on odd sizes reflection maps the grid on itself."""
    coils = ring_coils(6)
    kspace = ellipse_kspace([Ellipse(1.0, (0, 0), (0.6, 0.7), 20)], (65, 65), maps=coils)[:, 22:43, 22:43]
    gram = kspace.reshape(6, -1) @ kspace.reshape(6, -1).conj().T
    reference = Compression(gram, None, has_noise_units=False).reference
    maps, eigenvalue = first(eigenvector_maps([kspace], shape, reference, has_noise_units=False))
    np.testing.assert_allclose(eigenvalue, eigenvalue[::-1, ::-1], atol=2e-3)
    inside = rasterise([Ellipse(1, (0, 0), (0.55, 0.65), 20)], shape).real > 0
    reflected = np.roll(maps, 3, axis=0)[:, ::-1, ::-1]  # a coil's opposite is three places on
    np.testing.assert_allclose(np.abs(maps)[:, inside], np.abs(reflected)[:, inside], atol=2e-3)


@pytest.mark.parametrize("method", ["eigenvector", "adaptive"])
def test_maps_have_the_references_phase_and_are_deterministic(method: str) -> None:
    block, _ = calibration(6, 24)
    gram = block.reshape(6, -1) @ block.reshape(6, -1).conj().T
    reference = Compression(gram, None, has_noise_units=False).reference

    def make() -> Array:
        if method == "adaptive":
            return adaptive_maps([block], (64, 60), reference)
        return first(eigenvector_maps([block], (64, 60), reference, has_noise_units=False))[0]

    maps = make()
    assert maps.tobytes() == make().tobytes()
    along = np.tensordot(reference.conj(), maps, axes=1)
    inside = rasterise([Ellipse(1, (0.02, -0.03), (0.6, 0.7), 10)], (64, 60)).real > 0
    strong = inside & (np.abs(along) > 0.2)
    assert strong.mean() > 0.2
    assert np.abs(np.angle(along[strong])).max() < 0.1


@pytest.mark.parametrize("method", ["eigenvector", "adaptive"])
def test_maps_are_right_also_where_the_phase_reference_vanishes(method: str) -> None:
    """A reference orthogonal to the true maps at a point: about it phases turn by 2 pi, but directions do not."""
    block, true = calibration(8, 24)
    shape = (128, 120)
    on_grid = np.stack([m.on_grid(shape) for m in true])
    place = 71, 55
    there, start = on_grid[:, place[0], place[1]], np.ones(8, np.complex128)
    reference = start - there * np.vdot(there, start) / np.vdot(there, there)
    if method == "adaptive":
        maps = adaptive_maps([block], shape, reference)
    else:
        maps, _ = first(eigenvector_maps([block], shape, reference, has_noise_units=False))
    about = np.s_[place[0] - 8 : place[0] + 9, place[1] - 8 : place[1] + 9]
    assert alignment(maps, on_grid)[about].min() > (0.999 if method == "eigenvector" else 0.99)
    along = np.tensordot(reference.conj(), maps, axes=1)[about]
    assert along.real.min() > -1e-3
    assert np.abs(along).min() < 0.1


@pytest.mark.parametrize("noise", [1e-3, 3e-2, 0.3])
def test_support_holds_the_object_and_little_else(noise: float) -> None:
    """The subspace is what noise cannot explain, and the smallest eigenvalue kept follows the data."""
    block, _ = calibration(8, 24, noise=noise)
    found = eigenvector_maps([block / noise], (64, 60), np.ones(8) / math.sqrt(8), has_noise_units=True)
    support = np.any(found.sets[0] != 0, axis=0)
    inside = rasterise([Ellipse(1, (0.02, -0.03), (0.68, 0.78), 10)], (64, 60)).real > 0.5
    beyond = rasterise([Ellipse(1, (0.02, -0.03), (0.86, 0.95), 10)], (64, 60)).real == 0
    assert support[inside].mean() > 0.999
    assert support[beyond].mean() < 0.15
    assert 0.85 <= found.threshold <= 0.995


def test_adaptive_maps_follow_the_true_ones() -> None:
    """Source: Walsh, Gmitro & Marcellin 2000."""
    block, true = calibration(8, 24, noise=1e-3)
    maps = adaptive_maps([block], (64, 60), np.ones(8) / math.sqrt(8))
    inside = rasterise([Ellipse(1, (0.02, -0.03), (0.6, 0.7), 10)], (64, 60)).real > 0
    on_grid = np.stack([m.on_grid((64, 60)) for m in true])
    assert np.quantile(alignment(maps, on_grid)[inside], 0.05) > 0.99
    np.testing.assert_allclose(np.linalg.norm(maps, axis=0), 1, atol=1e-5)


def test_maps_do_not_depend_on_the_scale_of_the_data() -> None:
    block, _ = calibration(4, 20)
    reference = np.ones(4) / 2
    one, _ = first(eigenvector_maps([block], (64, 60), reference, has_noise_units=False))
    other, _ = first(eigenvector_maps([1000 * block], (64, 60), reference, has_noise_units=False))
    np.testing.assert_allclose(one, other, atol=1e-4)


def test_sensitivity_weighted_combination_reaches_the_optimal_signal_to_noise_ratio() -> None:
    """Source: Roemer et al. 1990: SNR = m sqrt(S^H Psi^-1 S), and root-sum-of-squares never exceeds it.

    At a true SNR of 30 and 3000 draws the ratio is known to about 2 %.
    """
    coils, draws = 8, 3000
    psi = covariance(coils, seed=3)
    maps = coil_maps(coils, (4, 5))
    whitening = whitening_from(psi, "noise-scan", 0)
    optimum = np.sqrt(np.einsum("cyx,cd,dyx->yx", maps.conj(), np.linalg.inv(psi), maps).real)
    signal = 30 / optimum
    noise = draw(psi, draws * 20, 5).reshape(coils, draws, 4, 5)
    images = maps[:, None] * signal + noise
    whitened_maps = whitening.apply(maps)
    combined = np.stack(
        [sensitivity_weighted(whitening.apply(images[:, k]), whitened_maps) for k in range(draws)]
    )
    magnitude_snr = (
        signal / combined.real.std(axis=0) / math.sqrt(2)
    )  # complex sd is sqrt(2) of the real part's
    np.testing.assert_allclose(combined.mean(axis=0), signal, rtol=0.01)
    np.testing.assert_allclose(magnitude_snr, 30, rtol=0.06)
    assert np.mean(magnitude_snr) == pytest.approx(30, rel=0.02)
    rss = root_sum_of_squares(np.moveaxis(images, 1, -1)).real  # raw channels, as scanners show them
    rss_snr = rss.mean(axis=-1) / rss.std(axis=-1) / math.sqrt(2)
    assert (rss_snr < 30 * 1.06).all()
    assert np.mean(rss_snr) < np.mean(magnitude_snr)


def test_root_sum_of_squares_of_noise_alone_looks_like_signal() -> None:
    """Source: Constantinides et al. 1997: mean over sd is 5.6 for 8 coils, so the comparison needs true signal."""
    noise = root_sum_of_squares(complex_normal(np.random.default_rng(0), (8, 200, 300))).real
    assert noise.mean() / noise.std() == pytest.approx(5.6, abs=0.05)


def test_combination_is_zero_where_the_maps_are() -> None:
    maps = coil_maps(3, (6, 6))
    maps[:, 0] = 0
    combined = sensitivity_weighted(np.ones((3, 6, 6), np.complex128), maps)
    assert not combined[0].any()
    assert np.isfinite(combined).all()


def test_compression_keeps_what_exceeds_the_noise_and_nothing_else() -> None:
    """Source: Buehrer et al. 2007; Huang et al. 2008: principal components of whitened calibration data."""
    rng = np.random.default_rng(1)
    basis, _ = np.linalg.qr(complex_normal(rng, (12, 12)))
    strengths = np.array([50.0, 20, 5, 1, 0.3, 0.1, 0.02, 0, 0, 0, 0, 0])
    gram = (basis * strengths) @ basis.conj().T + np.eye(12)  # noise has variance one in every channel
    auto = Compression(gram, "auto", has_noise_units=True)
    assert auto.coils == 6
    np.testing.assert_allclose(auto.matrix @ auto.matrix.conj().T, np.eye(6), atol=1e-10)
    inside = basis[:, :6] @ complex_normal(rng, (6, 50))
    np.testing.assert_allclose(auto.expand(auto.apply(inside)), inside, atol=1e-9)
    assert Compression(gram, KeepCoils(coils=3), has_noise_units=True).coils == 3
    assert Compression(gram, None, has_noise_units=True).coils == 12
    by_energy = Compression(gram, KeepEnergy(keep_energy=0.9), has_noise_units=True)
    assert by_energy.kept_energy >= 0.9
    fewer = Compression(gram, KeepCoils(coils=by_energy.coils - 1), has_noise_units=True)
    assert fewer.kept_energy < 0.9
    with pytest.raises(InvalidSettings, match="12"):
        Compression(gram, KeepCoils(coils=13), has_noise_units=True)


def test_whitened_noise_stays_white_in_virtual_coils() -> None:
    gram = covariance(6, seed=9)
    compression = Compression(gram, KeepCoils(coils=4), has_noise_units=True)
    noise = compression.apply(complex_normal(np.random.default_rng(2), (6, 30_000)))
    np.testing.assert_allclose(noise @ noise.conj().T / 30_000, np.eye(4), atol=0.03)
