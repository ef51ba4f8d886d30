"""From the matrix that is solved to the one that is written: oversampling cropped, pixels interpolated.

    encoded (field of view with oversampling) -> solved (without readout oversampling)
    -> kept (without phase oversampling) -> written (`reconstructed_matrix`)

The plane is solved on the whole encoded field of view along the phase encodes, since what lies in the margins would
fold into the image if it were left out; they are cropped from the image. Phase oversampling is that of `ky` (common
practice, no source).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.axes import image_axis
from recon.errors import InvalidScan
from recon.operators.fourier import crop_centre, zero_fill
from recon.scan import Scan, cropped_readout

#: interpolation makes pixels at most this many times as small along each axis.
FINEST: Final = 4


@dataclass(frozen=True)
class ImageGrid:
    """Sizes of one image along its last axes.

    Attributes
    ----------
    axes : tuple of str
        Image axes, such as ("y", "x").
    encoded, kept, written : tuple of int
        Positions of k-space, of the image without oversampling, and of the image that is written.
    """

    axes: tuple[str, ...]
    encoded: tuple[int, ...]
    kept: tuple[int, ...]
    written: tuple[int, ...]

    @property
    def is_plain(self) -> bool:
        """Whether the image is written as it was encoded."""
        return self.encoded == self.kept == self.written

    def share(self, axis: str) -> float:
        """Share of the encoded field of view along an image axis that the image shows (1 for axes not its own)."""
        if axis not in self.axes:
            return 1.0
        at = self.axes.index(axis)
        return self.kept[at] / self.encoded[at]

    def apply(self, images: NDArray[Any]) -> NDArray[np.complex64]:
        """Crop and interpolate complex images (..., *solved) to (..., *written); values keep their scale.

        Whether readout oversampling has been removed already does not matter.
        """
        axes = range(-len(self.axes), 0)
        for axis, size in zip(axes, self.kept, strict=True):
            if images.shape[axis] != size:
                images = crop_centre(images, size, axis)
        if self.written != self.kept:
            images = zero_fill(images, self.written)
        return np.ascontiguousarray(images, np.complex64)


def image_grid(scan: Scan) -> ImageGrid:
    """The grid of a scan's image.

    Raises
    ------
    InvalidScan
        When the oversampling leaves no whole number of columns, or the matrix is smaller than the image or much larger.
    """
    encoded = {image_axis(axis): n for axis, n in scan.axes.items() if axis in ("kz", "ky", "kx")}
    kept = dict(encoded)
    if "x" in kept:
        kept["x"] = cropped_readout(scan)
    if "y" in kept:
        kept["y"] = max(1, round(encoded["y"] / float(scan.attributes.get("phase_oversampling", 1.0))))
    written = _written(scan, kept)
    sizes = (tuple(of.values()) for of in (encoded, kept, written))
    return ImageGrid(tuple(encoded), *sizes)


def _written(scan: Scan, kept: dict[str, int]) -> dict[str, int]:
    wanted = scan.attributes.get("reconstructed_matrix")
    if wanted is None:
        return dict(kept)
    by_axis = dict(zip("xyz", (round(n) for n in wanted), strict=True))
    for axis, size in by_axis.items():
        least, most = kept.get(axis, 1), FINEST * kept[axis] if axis in kept else 1
        if not least <= size <= most:
            received = ", ".join(str(n) for n in by_axis.values())
            raise InvalidScan(
                f"/kspace: reconstructed_matrix is ({received}); accepted along {axis} is {least}, the image without "
                f"oversampling, up to {most}: correct it, readout_oversampling or phase_oversampling, or leave it out"
            )
    return {axis: by_axis[axis] for axis in kept}
