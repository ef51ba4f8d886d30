"""How much memory a reconstruction will take, told before its k-space is read.

Sizes follow from the axes, the mask and the settings alone; the factors were measured on volumes of 96 x 96 x 96 with
8 coils. `recon` does not ask how much there is: its callers pass a limit, and without one nothing is refused.
"""

from __future__ import annotations

from typing import Final

import numpy as np

from recon.errors import InvalidScan, InvalidSettings
from recon.grid import image_grid
from recon.scan import Scan
from recon.settings import Settings
from recon.volume import BLOCK_BYTES, LARGEST_CHUNKS, slabs
from recon.volume_sink import POSITIONS

#: the program itself: interpreter, libraries, compiled loops.
PROGRAM_BYTES: Final = 200_000_000
#: one complex64 number.
_NUMBER: Final = 8
#: images of a joint solve (state of the iteration, dual fields, transforms on their way), in images of the volume.
JOINT_IMAGES: Final = 18
#: the phase that is taken out of a constrained image, and the dual fields' sum and transforms, likewise.
PHASE_IMAGES: Final = 2
SHIFT_IMAGES: Final = 3
#: arrays of all coils of one plane, or of the frames of a series, while it is solved.
PLANE_ARRAYS: Final = 8
#: and more of them for a second set of maps.
SECOND_SET_ARRAYS: Final = 3


def estimate_bytes(scan: Scan, settings: Settings, *, threads: int = 1) -> int:
    """Peak memory of reconstructing a scan from file to file.

    Parameters
    ----------
    scan : Scan
        Only its mask is read.
    settings : Settings
    threads : int
        Planes worked on at once.
    """
    coils = scan.coils
    plane_arrays = PLANE_ARRAYS + SECOND_SET_ARRAYS * (settings.map_sets - 1)
    if not scan.is_volume:
        frames = _tied_frames(scan, settings)
        plane = frames * int(np.prod(scan.plane_shape)) * _NUMBER
        return PROGRAM_BYTES + (threads + 1) * (plane_arrays * coils + _extra_images(settings)) * plane
    grid = image_grid(scan)
    lines, is_complete = _sampled_lines(scan)
    positions = grid.kept[2] if is_complete else grid.encoded[2]
    plane = grid.encoded[0] * grid.encoded[1]
    has_chunks = getattr(scan.kspace_array.data, "chunks", None) is not None
    total = PROGRAM_BYTES + (LARGEST_CHUNKS if has_chunks else 2 * BLOCK_BYTES)
    if is_complete:
        total += lines * positions * coils * _NUMBER
    if scan.sensitivity_array is not None:
        total += coils * plane * positions * _NUMBER
    volumes = scan.axes.get("frame", 1) * scan.axes.get("contrast", 1)
    written = int(np.prod(grid.written[:2])) * _NUMBER
    held = POSITIONS if grid.kept[2] == grid.written[2] else grid.kept[2] + 3 * grid.written[2]
    total += 2 * volumes * written * held
    if settings.volume == "joint":
        images = JOINT_IMAGES + _extra_images(settings)
        virtual = getattr(settings.coil_compression, "coils", coils)
        # maps and data; of incomplete readouts the residual of all coils takes the place of the data
        total += (2 * virtual + images + (0 if is_complete else coils)) * plane * positions * _NUMBER
    else:
        total += (threads + 1) * (plane_arrays * coils + _extra_images(settings)) * plane * _NUMBER
    return total


def _tied_frames(scan: Scan, settings: Settings) -> int:
    """Frames that are solved as one problem."""
    is_tied = settings.method == "compressed-sensing" and (
        settings.temporal_strength != 0 or settings.low_rank_strength != 0
    )
    return 1 if scan.is_volume or not is_tied else scan.axes.get("frame", 1)


def _extra_images(settings: Settings) -> int:
    """Images that constraints and cycle spinning take beside the solver's own."""
    images = PHASE_IMAGES if settings.constraint != "none" else 0
    if settings.method != "compressed-sensing":
        return images
    # one of the wavelet terms has no dual field, unless the image is non-negative
    fields = settings.wavelet_shifts - (settings.constraint != "nonnegative")
    return images + (fields + SHIFT_IMAGES if fields > 0 else 0)


def _sampled_lines(scan: Scan) -> tuple[int, bool]:
    """Lines (kz, ky) that any average of any volume measured, as far as the mask says, and whether all are complete."""
    volumes = scan.axes.get("frame", 1) * scan.axes.get("contrast", 1)
    if scan.mask_array is None:
        return volumes * int(np.prod(scan.plane_shape)), True
    source, lines, is_complete = slabs(scan), 0, True
    for index in source.planes():
        mask = source.mask(index)
        lines += int(mask.any(axis=1).sum())
        is_complete = is_complete and bool((mask == mask[:, :1]).all())
    return lines, is_complete


def check_memory(scan: Scan, settings: Settings, limit_bytes: int | None, *, threads: int = 1) -> None:
    """Refuse a scan that will not fit.

    Parameters
    ----------
    limit_bytes : int or None
        Memory that there is; None: not known, nothing is refused.

    Raises
    ------
    InvalidSettings
        Where other settings would do.
    InvalidScan
        Where none would.
    """
    if limit_bytes is None:
        return
    needed = estimate_bytes(scan, settings, threads=threads)
    if needed <= limit_bytes:
        return
    sizes = f"about {_gigabytes(needed)} of memory, and there are {_gigabytes(limit_bytes)}"
    if settings.volume == "joint" and scan.is_volume:
        planes = estimate_bytes(scan, settings.model_copy(update={"volume": "planes"}), threads=threads)
        if planes <= limit_bytes and _sampled_lines(scan)[1]:
            remedy = f'choose planes ({_gigabytes(planes)}), or fewer virtual coils by coil_compression {{"coils": n}}'
        else:
            remedy = (
                'choose fewer virtual coils by coil_compression {"coils": n}, or a machine with more memory'
            )
        detail = f"received joint for a volume that would take {sizes}: {remedy}"
        raise InvalidSettings([{"pointer": "/volume", "detail": detail}])
    frames = _tied_frames(scan, settings)
    if frames > 1:
        names = [name for name in ("temporal_strength", "low_rank_strength") if getattr(settings, name) != 0]
        alone = settings.model_copy(update=dict.fromkeys(names, 0.0))
        needed_alone = estimate_bytes(scan, alone, threads=threads)
        if needed_alone <= limit_bytes:
            detail = (
                f"received {getattr(settings, names[0])}, which ties {frames} frames into one problem that would take "
                f"{sizes}: set {' and '.join(names)} to 0, so that each frame is solved alone "
                f"({_gigabytes(needed_alone)}), or write fewer frames into one scan"
            )
            raise InvalidSettings([{"pointer": f"/{names[0]}", "detail": detail}])
    what = "volume" if scan.is_volume else "scan"
    raise InvalidScan(
        f"this {what} would take {sizes}: use a machine with more memory, or write fewer coils, frames or contrasts "
        f"into one scan"
    )


def _gigabytes(count: int) -> str:
    return f"{count / 1e9:.2g} GB" if count < 10e9 else f"{count / 1e9:.0f} GB"
