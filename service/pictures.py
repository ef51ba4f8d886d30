"""Pictures of images as PNG, each with the caution as a visible strip and as a text chunk.

Grey runs linearly from 0 to the 99.8th percentile of what is shown, so that a few hot pixels do not darken the rest.
"""

from __future__ import annotations

import io
import math
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

import h5py
import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw, ImageFont, PngImagePlugin

from recon.caution import CAUTION

if TYPE_CHECKING:
    from recon.scan import Scan

#: Percentile of the magnitudes that is shown as white.
WHITE_PERCENTILE: Final = 99.8
#: A stack is shown as this many of its planes at most, evenly chosen.
MOSAIC_PLANES: Final = 16

_SMALLEST_SIDE = 480
_LARGEST_SIDE = 1280
_GAP = 4
_PADDING = 8
_TEXT_SIZE = 15
_LABEL_SIZE = 13
_PAPER = (24, 24, 24)
_INK = (220, 220, 220)
_AMBER = (255, 193, 64)

Magnitude = NDArray[np.floating[Any]]


def picture_png(
    magnitude: Magnitude,
    *,
    title: str,
    pixel_size_mm: tuple[float, float] | None = None,
    labels: Sequence[str] = (),
) -> bytes:
    """One plane, or a stack of planes side by side, as PNG.

    Parameters
    ----------
    magnitude : ndarray of float, shape (rows, columns) or (planes, rows, columns)
        Not negative. Of a stack, up to `MOSAIC_PLANES` planes are shown, evenly chosen, on one grey scale.
    title : str
        Shown below the image, above the caution.
    pixel_size_mm : (float, float), optional
        Height and width of a pixel; pixels are drawn square when it is unknown.
    labels : sequence of str, optional
        One for each plane of a stack; its positions by default.

    Returns
    -------
    bytes
        PNG with the text chunks `Title`, `Caution` and `Software`.

    Raises
    ------
    ValueError
        The array has another number of dimensions, or no pixel.
    """
    stack = np.asarray(magnitude, dtype=np.float32)
    if stack.ndim not in {2, 3} or stack.size == 0:
        raise ValueError(
            f"a picture needs (rows, columns) or (planes, rows, columns), received the shape {stack.shape}"
        )
    is_single = stack.ndim == 2
    stack = stack[np.newaxis] if is_single else stack
    chosen = evenly_chosen(len(stack), MOSAIC_PLANES)
    names = list(labels) or [str(position) for position in range(len(stack))]
    white = _white(stack[chosen])
    across = math.ceil(math.sqrt(len(chosen)))
    size = _tile_size(stack.shape[1:], pixel_size_mm, across)
    tiles = [_tile(stack[position], white, size) for position in chosen]
    picture = tiles[0] if is_single else _mosaic(tiles, [names[position] for position in chosen], across)
    return _encode(_with_strip(picture, title), title)


def result_png(path: Path | str, *, title: str) -> bytes:
    """The magnitude image of a result file (`image.h5`): one plane as it is, several as a mosaic.

    Only the planes that are shown are read: of a volume the middle one. Axes other than the last two count as planes.
    """
    with h5py.File(path, "r") as file:
        image = file["image"]
        axes = [str(dimension.label) for dimension in image.dims]
        middle = (image.shape[-3] // 2,) if axes[-3:] == ["z", "y", "x"] else ()
        outer = image.shape[: image.ndim - 2 - len(middle)]
        fields = image.attrs.get("field_of_view_mm")
        pixel_size = None if fields is None else _pixel_size(axes[-2:], image.shape[-2:], fields)
        if not outer:
            where = f", z {middle[0]}" if middle else ""
            return picture_png(np.abs(image[middle]), title=title + where, pixel_size_mm=pixel_size)
        every = list(np.ndindex(*outer))
        chosen = [every[position] for position in evenly_chosen(len(every), MOSAIC_PLANES)]
        stack = np.stack([np.abs(image[(*index, *middle)]) for index in chosen])
        labels = [
            "  ".join(f"{axis} {i}" for axis, i, n in zip(axes, index, outer, strict=False) if n > 1)
            for index in chosen
        ]
    return picture_png(stack, title=title, pixel_size_mm=pixel_size, labels=labels)


def quick_look(scan: Scan) -> bytes:
    """What a scan holds at a glance: its middle plane, zero-filled, root-sum-of-squares over the coils."""
    if scan.is_volume:
        from recon.volume import middle_plane

        sampled, index = middle_plane(scan)
        axes = ["y", "x"]
    else:
        planes = scan.planes()
        index = planes[len(planes) // 2]
        sampled = scan.samples(index).kspace
        axes = [axis.removeprefix("k") for axis in scan.plane_axes]
    image = np.fft.fftshift(
        np.fft.ifft2(np.fft.ifftshift(sampled, axes=(-2, -1)), norm="ortho"), axes=(-2, -1)
    )
    magnitude = np.sqrt(np.sum(np.abs(image.astype(np.complex64)) ** 2, axis=0))
    fields = scan.attributes.get("field_of_view_mm")
    pixel_size = None if fields is None else _pixel_size(axes, magnitude.shape, fields)
    where = ", ".join(f"{axis} {getattr(index, axis)}" for axis in scan.outer_axes if scan.axes[axis] > 1)
    return picture_png(
        magnitude, title="zero-filled quick look" + (f", {where}" if where else ""), pixel_size_mm=pixel_size
    )


def evenly_chosen(count: int, most: int) -> list[int]:
    """Positions 0 to `count` - 1, or `most` of them at equal distances, both ends included."""
    if count <= most:
        return list(range(count))
    return [round(position * (count - 1) / (most - 1)) for position in range(most)]


def _pixel_size(
    axes: Sequence[str], shape: Sequence[int], fields: Sequence[float]
) -> tuple[float, float] | None:
    by_axis = dict(zip("xyz", (float(field) for field in fields), strict=True))
    height, width = (by_axis[axis] / length for axis, length in zip(axes, shape, strict=True))
    return (height, width) if min(height, width) > 0 else None


def _white(stack: Magnitude) -> float:
    white = float(np.percentile(stack, WHITE_PERCENTILE))
    return white if white > 0 else float(stack.max()) or 1.0


def _tile_size(
    shape: Sequence[int], pixel_size_mm: tuple[float, float] | None, across: int
) -> tuple[int, int]:
    """Height and width on screen: true aspect ratio, no plane smaller than it needs to be, no picture too large."""
    height, width = pixel_size_mm or (1.0, 1.0)
    smaller = min(height, width)
    real = shape[0] * height / smaller, shape[1] * width / smaller
    scale = min(max(1.0, _SMALLEST_SIDE / across / max(real)), _LARGEST_SIDE / across / max(real))
    if scale > 1 and height == width:
        scale = float(math.ceil(scale)) if math.ceil(scale) * max(real) * across <= _LARGEST_SIDE else scale
    return max(1, round(real[0] * scale)), max(1, round(real[1] * scale))


def _tile(plane: Magnitude, white: float, size: tuple[int, int]) -> Image.Image:
    grey = np.clip(plane * (255.0 / white) + 0.5, 0, 255).astype(np.uint8)
    tile = Image.fromarray(grey)
    height, width = size
    is_whole_factor = height % grey.shape[0] == 0 and width % grey.shape[1] == 0
    return tile.resize(
        (width, height), Image.Resampling.NEAREST if is_whole_factor else Image.Resampling.BICUBIC
    )


def _mosaic(tiles: Sequence[Image.Image], labels: Sequence[str], across: int) -> Image.Image:
    width, height = tiles[0].size
    down = math.ceil(len(tiles) / across)
    mosaic = Image.new("RGB", (across * (width + _GAP) - _GAP, down * (height + _GAP) - _GAP), _PAPER)
    draw = ImageDraw.Draw(mosaic)
    for position, (tile, label) in enumerate(zip(tiles, labels, strict=True)):
        row, column = divmod(position, across)
        corner = column * (width + _GAP), row * (height + _GAP)
        mosaic.paste(tile, corner)
        draw.text(
            (corner[0] + 4, corner[1] + 3), label, _AMBER, ImageFont.load_default(_LABEL_SIZE), stroke_width=1,
            stroke_fill=(0, 0, 0),
        )  # fmt: skip
    return mosaic


def _with_strip(picture: Image.Image, title: str) -> Image.Image:
    font = ImageFont.load_default(_TEXT_SIZE)
    narrowest = math.ceil(font.getlength(CAUTION)) + 2 * _PADDING
    width = max(picture.width, narrowest)
    lines = [(line, _INK) for line in _wrapped(title, font, width - 2 * _PADDING)] + [(CAUTION, _AMBER)]
    step = _TEXT_SIZE + 6
    whole = Image.new("RGB", (width, picture.height + len(lines) * step + 2 * _PADDING), _PAPER)
    whole.paste(picture, ((width - picture.width) // 2, 0))
    draw = ImageDraw.Draw(whole)
    for number, (line, ink) in enumerate(lines):
        draw.text((_PADDING, picture.height + _PADDING + number * step), line, ink, font)
    return whole


def _wrapped(text: str, font: ImageFont.FreeTypeFont | ImageFont.ImageFont, width: int) -> list[str]:
    lines: list[str] = []
    for word in text.split():
        if lines and font.getlength(f"{lines[-1]} {word}") <= width:
            lines[-1] += f" {word}"
        else:
            lines.append(word)
    return lines


def _encode(picture: Image.Image, title: str) -> bytes:
    chunks = PngImagePlugin.PngInfo()
    chunks.add_itxt("Title", title)
    chunks.add_text("Caution", CAUTION)
    chunks.add_text("Software", "Fallow")
    buffer = io.BytesIO()
    picture.save(buffer, "PNG", pnginfo=chunks)
    return buffer.getvalue()
