"""Pictures: grey scale, shape on screen, and a caution that is seen and can be read by programs."""

from __future__ import annotations

import io
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from PIL import Image

from recon.caution import CAUTION
from recon.formats import open_scan, write_scan
from service.pictures import evenly_chosen, picture_png, quick_look, result_png


def opened(png: bytes) -> Image.Image:
    picture = Image.open(io.BytesIO(png))
    picture.load()
    return picture


def text_of(picture: Image.Image) -> dict[str, str]:
    chunks: dict[str, str] = picture.text  # type: ignore[attr-defined]
    return chunks


def disc(rows: int, columns: int) -> np.ndarray[Any, np.dtype[np.float64]]:
    y, x = np.mgrid[-1 : 1 : rows * 1j, -1 : 1 : columns * 1j]
    return np.asarray((x**2 + y**2 < 0.5) * 1.0)


def test_caution_is_a_text_chunk_and_a_visible_strip() -> None:
    picture = opened(picture_png(disc(64, 64), title="pear"))
    assert text_of(picture)["Caution"] == CAUTION
    assert text_of(picture)["Title"] == "pear"
    pixels = np.asarray(picture.convert("RGB")).astype(int)
    strip = pixels[pixels.shape[1] :]
    assert strip.shape[0] >= 40
    is_amber = (strip[..., 0] > 180) & (strip[..., 2] < 120)
    assert is_amber.sum() > 300


@pytest.mark.parametrize(
    ("pixel_size", "ratio"),
    [(None, 64 / 96), ((1.0, 1.0), 64 / 96), ((2.0, 1.0), 128 / 96), ((0.5, 1.5), 64 / 288)],
)
def test_image_has_its_true_aspect_ratio(pixel_size: tuple[float, float] | None, ratio: float) -> None:
    """A white frame around the plane shows where the plane is on the picture."""
    plane = np.ones((64, 96))
    pixels = np.asarray(opened(picture_png(plane, title="t", pixel_size_mm=pixel_size)).convert("L"))
    white = np.argwhere(pixels == 255)
    height, width = white.max(axis=0) - white.min(axis=0) + 1
    assert height / width == pytest.approx(ratio, rel=0.02)


def test_grey_runs_from_zero_to_the_percentile_and_hot_pixels_do_not_darken_the_rest() -> None:
    plane = np.tile(np.linspace(0, 1, 100), (100, 1))
    hot = plane.copy()
    hot[0, 0] = 1e6
    grey = np.asarray(opened(picture_png(plane, title="t")).convert("L"))[:400]
    assert grey[200, 2] == 0
    assert grey[200, -2] >= 254
    middle = grey[200, grey.shape[1] // 2]
    assert abs(int(middle) - 128) <= 2
    hot_grey = np.asarray(opened(picture_png(hot, title="t")).convert("L"))
    assert abs(int(hot_grey[200, grey.shape[1] // 2]) - 128) <= 3


def test_black_image_makes_a_black_picture() -> None:
    assert np.asarray(opened(picture_png(np.zeros((8, 8)), title="t")).convert("L"))[:400].max() == 0


def test_same_input_gives_the_same_bytes() -> None:
    assert picture_png(disc(32, 40), title="t") == picture_png(disc(32, 40), title="t")


def test_chosen_planes_are_even_and_include_both_ends() -> None:
    assert evenly_chosen(5, 16) == [0, 1, 2, 3, 4]
    chosen = evenly_chosen(64, 16)
    assert (chosen[0], chosen[-1], len(set(chosen))) == (0, 63, 16)
    assert set(np.diff(chosen)) <= {4, 5}


@pytest.mark.parametrize("shape", [(4,), (0, 5), (2, 2, 2, 2)])
def test_what_is_no_plane_is_refused(shape: tuple[int, ...]) -> None:
    with pytest.raises(ValueError, match="a picture needs"):
        picture_png(np.zeros(shape), title="t")


@pytest.mark.parametrize("outer", [(), (1,), (3,), (2, 20)])
def test_result_file_of_any_number_of_planes(tmp_path: Path, outer: tuple[int, ...]) -> None:
    labels = {0: (), 1: ("slice",), 2: ("frame", "slice")}[len(outer)]
    path = tmp_path / "image.h5"
    with h5py.File(path, "w") as file:
        image = np.broadcast_to(disc(48, 40), (*outer, 48, 40)).astype(np.complex64)
        dataset = file.create_dataset("image", data=image)
        dataset.attrs["field_of_view_mm"] = [80.0, 96.0, 5.0]
        for position, label in enumerate((*labels, "y", "x")):
            dataset.dims[position].label = label
    picture = opened(result_png(path, title="pear"))
    assert text_of(picture)["Caution"] == CAUTION
    assert max(picture.size) <= 1500


def test_quick_look_shows_the_object_where_it_is(tmp_path: Path) -> None:
    """A disc in the upper left quarter, seen by two coils, undersampled along ky."""
    image = np.zeros((64, 48))
    image[8:24, 6:18] = 1
    spectrum = np.fft.fftshift(np.fft.fft2(np.fft.ifftshift(image), norm="ortho"))
    kspace = np.stack([spectrum, 0.5j * spectrum]).astype(np.complex64)
    mask = np.ones(64, dtype=bool)
    mask[:16] = False
    path = tmp_path / "scan.h5"
    write_scan(path, kspace, ("coil", "ky", "kx"), mask=mask, mask_axes=("ky",))
    with open_scan(path) as scan:
        picture = opened(quick_look(scan))
    assert text_of(picture)["Caution"] == CAUTION
    grey = np.asarray(picture.convert("L")).astype(float)
    scale = picture.size[0] // 48
    inside = grey[10 * scale : 22 * scale, 8 * scale : 16 * scale].mean()
    outside = grey[40 * scale : 60 * scale, 28 * scale : 44 * scale].mean()
    assert inside > 5 * outside
