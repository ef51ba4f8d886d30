"""Volumes (`kz ky kx`) seen in two other ways: as slabs, one for each `kz`, or planes, one for each readout position.

    y(kz, ky, x) = 1/sqrt(N) sum_kx y(kz, ky, kx) exp(2 pi i (kx - N//2)(x - N//2) / N)

Where every readout is complete, this unitary transform splits a volume into planes (`kz`, `ky`) that have nothing to do
with each other, and leaves the noise white. Planes are kept packed, sampled lines alone, so that they take the memory
of the samples once.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon.averages import Samples
from recon.axes import ArrayLike, LabelledArray
from recon.operators.fourier import crop_centre, inverse_transform
from recon.scan import PlaneIndex, Scan, cropped_readout

#: a volume is read in blocks of `kz` of about this size: fewer passes over a file whose fastest axis is another.
BLOCK_BYTES: Final = 16 << 20
#: or, in a file of chunks, of whole ones up to this size.
LARGEST_CHUNKS: Final = 64 << 20

#: frame and contrast of one volume.
Key = tuple[int, int]


class _Blocks:
    """An array read several positions of one axis at a time; the last block is kept."""

    def __init__(self, data: ArrayLike, axis: int, inner: tuple[int, ...]) -> None:
        self._data = data
        self._axis = axis
        size = (
            int(np.prod([data.shape[other] for other in inner]))
            * getattr(data, "dtype", np.dtype("c8")).itemsize
        )
        step = max(1, BLOCK_BYTES // max(size, 1))
        chunks = getattr(data, "chunks", None)
        if chunks is not None and chunks[axis] * size <= LARGEST_CHUNKS:
            step = -(-step // chunks[axis]) * chunks[axis]  # compressed chunks are unpacked once
        self._step = min(data.shape[axis], step)
        self._kept: tuple[Any, NDArray[Any]] | None = None

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the whole."""
        return self._data.shape

    def release(self) -> None:
        """Forget the last block."""
        self._kept = None

    def __getitem__(self, key: tuple[Any, ...]) -> Any:
        start = key[self._axis] // self._step * self._step
        where = (start, *(part if isinstance(part, int) else None for part in key[: self._axis]))
        where = (*where, *(part if isinstance(part, int) else None for part in key[self._axis + 1 :]))
        if self._kept is None or self._kept[0] != where:
            self._kept = None  # frees the last block before the next is read
            part = (*key[: self._axis], slice(start, start + self._step), *key[self._axis + 1 :])
            self._kept = where, np.asarray(self._data[part])
        axis = sum(not isinstance(part, int) for part in key[: self._axis])
        return np.take(self._kept[1], key[self._axis] - start, axis=axis)


@dataclass
class Slabs(Scan):
    """A volume as a stack: each `kz` is one `slice` of (`ky`, `kx`).

    Attributes
    ----------
    columns : bool (kx) or None
        What of each line was sampled, where the mask is inferred: a slab alone may hold too few lines to tell.
    """

    columns: NDArray[np.bool_] | None = None

    @property
    def keeps_readouts(self) -> bool:
        """See `Scan.keeps_readouts`: only complete ones can be transformed on their own."""
        return True

    def _mask(
        self, index: PlaneIndex, average: int, kspace: NDArray[np.complex64] | None = None
    ) -> NDArray[np.bool_]:
        if self.mask_array is not None:
            return super()._mask(index, average, kspace)
        data = self._kspace(index, average) if kspace is None else kspace
        lines = np.any(data != 0, axis=(0, 2))
        sampled = np.repeat(lines[:, np.newaxis], data.shape[2], axis=1)
        return sampled if self.columns is None else sampled & self.columns

    def release(self) -> None:
        """Free what was kept of the file for reading on."""
        if isinstance(self.kspace_array.data, _Blocks):
            self.kspace_array.data.release()

    def planes(self) -> list[PlaneIndex]:
        """Every slab, volume by volume, in the order that a file is read fastest."""
        return sorted(super().planes(), key=lambda index: (index.frame, index.contrast, index.slice))


def slabs(scan: Scan) -> Slabs:
    """View a volume as slabs; nothing is read or copied."""
    kspace = scan.kspace_array
    data: ArrayLike = kspace.data
    if not isinstance(data, np.ndarray):
        inner = [i for i, label in enumerate(kspace.labels) if label in ("coil", "ky", "kx", "complex")]
        data = _Blocks(data, kspace.labels.index("kz"), tuple(inner))
    mask = scan.mask_array
    return Slabs(
        LabelledArray(data, _slab_labels(kspace)),
        mask_array=None if mask is None else LabelledArray(mask.data, _slab_labels(mask)),
        noise_array=scan.noise_array,
        attributes=scan.attributes,
        noise_attributes=scan.noise_attributes,
        drops_spikes=scan.drops_spikes,
    )


def middle_plane(scan: Scan) -> tuple[NDArray[np.complex64], PlaneIndex]:
    """k-space (coil, ky, kx) of the plane z = n // 2 of the middle volume, and which volume that is.

    The inverse transform along kz has phase zero there, so that it is a sum, taken slab by slab.
    """
    source = slabs(scan)
    volumes = [index for index in source.planes() if index.slice == 0]
    middle = volumes[len(volumes) // 2]
    total = np.zeros((scan.coils, scan.axes["ky"], scan.axes["kx"]), np.complex64)
    for kz in range(scan.axes["kz"]):
        total += source.samples(middle._replace(slice=kz)).kspace
    return total / np.float32(np.sqrt(scan.axes["kz"])), middle


def _slab_labels(array: LabelledArray) -> tuple[str, ...]:
    return tuple("slice" if label == "kz" else label for label in array.labels)


@dataclass(frozen=True)
class Lines:
    """The sampled lines of one volume in hybrid space.

    Attributes
    ----------
    samples : complex64 (x, coil, line)
    counts : int (kz, ky)
        How often each line was measured; lines are those with any, in C order.
    """

    samples: NDArray[np.complex64]
    counts: NDArray[np.int64]

    def plane(self, x: int) -> NDArray[np.complex64]:
        """One readout position, complex64 (coil, kz, ky), zero where not sampled."""
        out = np.zeros((self.samples.shape[1], self.counts.size), np.complex64)
        out[:, np.flatnonzero(self.counts)] = self.samples[x]
        return out.reshape(-1, *self.counts.shape)


class _Packed:
    """Packed lines behind a labelled array (frame, slice = x, contrast, coil, kz, ky)."""

    def __init__(self, lines: Mapping[Key, Lines], labels: tuple[str, ...], shape: tuple[int, ...]) -> None:
        self._lines, self._labels, self.shape = lines, labels, shape

    def __getitem__(self, key: tuple[Any, ...]) -> Any:
        at = dict(zip(self._labels, key, strict=True))
        plane = self._lines[at.get("frame", 0), at.get("contrast", 0)].plane(at["slice"])
        return plane[at["coil"], at["kz"], at["ky"]]


@dataclass
class PlaneScan(Scan):
    """The readout positions of a volume as a stack of phase-phase planes: `slice` is x."""

    lines: Mapping[Key, Lines] = field(default_factory=dict)

    def samples(self, index: PlaneIndex) -> Samples:
        """One readout position; averages were combined when the lines were read."""
        lines = self.lines[index.frame, index.contrast]
        return Samples(lines.plane(index.slice), lines.counts)


def plane_scan(scan: Scan, lines: Mapping[Key, Lines]) -> PlaneScan:
    """Make planes of a volume whose lines have been read.

    Parameters
    ----------
    scan : Scan
        The volume.
    lines : mapping
        From `read_lines`.
    """
    positions, coils, _ = next(iter(lines.values())).samples.shape
    outer = {axis: scan.axes[axis] for axis in scan.outer_axes}
    sizes = {**outer, "slice": positions, "coil": coils, "kz": scan.axes["kz"], "ky": scan.axes["ky"]}
    labels = tuple(axis for axis in ("frame", "slice", "contrast", "coil", "kz", "ky") if axis in sizes)
    shape = tuple(sizes[axis] for axis in labels)
    keys = [(f, c) for f in range(outer.get("frame", 1)) for c in range(outer.get("contrast", 1))]
    masks = np.stack([lines[key].counts > 0 for key in keys])
    return PlaneScan(
        LabelledArray(_Packed(lines, labels, shape), labels),
        mask_array=LabelledArray(masks.reshape(*outer.values(), *scan.plane_shape), (*outer, "kz", "ky")),
        noise_array=scan.noise_array,
        reference_array=_hybrid_reference(scan, positions),
        sensitivity_array=_maps_by_position(scan, positions),
        attributes=_plane_attributes(scan),
        noise_attributes=scan.noise_attributes,
        title=scan.title,
        findings=scan.findings,
        lines=lines,
    )


def _plane_attributes(scan: Scan) -> dict[str, Any]:
    """Those of the volume; what they say of the readout has been done, or is left to do on the volume."""
    attributes = {name: value for name, value in scan.attributes.items() if name != "readout_oversampling"}
    if "reconstructed_matrix" in attributes:
        attributes["reconstructed_matrix"] = [1, *attributes["reconstructed_matrix"][1:]]
    return attributes


def read_lines(
    source: Slabs, counts: Mapping[Key, NDArray[np.int64]], report: Callable[[float], None]
) -> dict[Key, Lines]:
    """Read the sampled lines of every volume, slab by slab, and transform them along the readout.

    Parameters
    ----------
    source : Slabs
    counts : mapping of int (kz, ky)
        How often each line was measured, by frame and contrast.
    report : callable
        Called with the fraction done.
    """
    columns = cropped_readout(source)
    lines = {}
    for key, of_volume in counts.items():
        total = int(np.count_nonzero(of_volume))
        lines[key] = Lines(np.zeros((columns, source.coils, total), np.complex64), of_volume)
    begun = dict.fromkeys(counts, 0)
    planes = source.planes()
    for done, index in enumerate(planes):
        report(done / len(planes))
        key = index.frame, index.contrast
        rows = np.flatnonzero(counts[key][index.slice])
        if rows.size == 0:
            continue
        hybrid = inverse_transform(source.samples(index).kspace[:, rows], (-1,))
        start = begun[key]
        begun[key] = start + rows.size
        lines[key].samples[:, :, start : begun[key]] = crop_centre(hybrid, columns).transpose(2, 0, 1)
    return lines


def read_centre(source: Slabs, key: Key, sides: tuple[int, int, int]) -> Lines:
    """Read the central block (kz, ky, kx) of a volume and interpolate it to every readout position.

    Noise keeps unit variance for each sample, though samples of neighbouring positions now share it.
    """
    encoded = source.axes["kx"]
    rows, columns = source.axes["slice"], source.axes["ky"]
    first_z, first_y, first_x = (
        n // 2 - side // 2 for n, side in zip((rows, columns, encoded), sides, strict=True)
    )
    block = np.zeros((source.coils, sides[0], sides[1], encoded), np.complex64)
    counts = np.zeros((rows, columns), np.int64)
    inside = slice(first_y, first_y + sides[1]), slice(first_x, first_x + sides[2])
    for row in range(sides[0]):
        samples = source.samples(PlaneIndex(key[0], first_z + row, key[1]))
        block[:, row, :, inside[1]] = samples.kspace[:, *inside]
        counts[first_z + row, inside[0]] = np.maximum(samples.counts[inside].min(axis=1), 1)
    hybrid = inverse_transform(block, (-1,)) * np.float32(np.sqrt(encoded / sides[2]))
    return Lines(np.ascontiguousarray(np.moveaxis(hybrid.reshape(source.coils, -1, encoded), -1, 0)), counts)


def _hybrid_reference(scan: Scan, positions: int) -> LabelledArray | None:
    """`/reference` along the readout in image space, its matrix there brought to that of the scan."""
    if scan.reference_array is None:
        return None
    reference = scan.reference_array.take()
    reference = reference if "coil" in scan.reference_array.axes else reference[np.newaxis]
    encoded, have = scan.axes["kx"], reference.shape[-1]
    if have >= encoded:
        padded = crop_centre(reference, encoded)
    else:
        padded = np.zeros((*reference.shape[:-1], encoded), np.complex64)
        start = encoded // 2 - have // 2
        padded[..., start : start + have] = reference
    hybrid = crop_centre(inverse_transform(padded, (-1,)), positions)
    return LabelledArray(np.moveaxis(hybrid, -1, 0), ("slice", "coil", "kz", "ky"))


def _maps_by_position(scan: Scan, positions: int) -> LabelledArray | None:
    """`/sensitivity` with readout positions first, oversampling removed."""
    array = scan.sensitivity_array
    if array is None:
        return None
    out = np.empty((positions, scan.coils, *scan.plane_shape), np.complex64)
    for coil in range(scan.coils):
        out[:, coil] = np.moveaxis(crop_centre(array.take(coil=coil), positions), -1, 0)
    return LabelledArray(out, ("slice", "coil", "z", "y"))
