"""Leaving out dead coils and spikes, on request alone: a view of the scan without them.

A dead coil is taken out of every array before anything is made of it. A spike and its neighbours along the readout
count as not sampled, for all coils; of a volume the whole line does, so that readouts stay complete.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from recon.axes import ArrayLike, LabelledArray
from recon.findings import Finding
from recon.inspection import Inspection, inspector_of
from recon.scan import Scan
from recon.settings import Settings


@dataclass(frozen=True)
class Excluded:
    """What was left out.

    Attributes
    ----------
    dead_coils : tuple of int
        Positions along the scan's coil axis.
    spikes : int
    """

    dead_coils: tuple[int, ...] = ()
    spikes: int = 0

    def as_dict(self) -> dict[str, Any]:
        """Plain JSON form."""
        return {"dead_coils": list(self.dead_coils), "spikes": self.spikes}

    def renumbered(self, coils: Sequence[int]) -> list[int]:
        """Positions along the scan's coil axis as positions among the coils that are left."""
        left = [coil for coil in coils if coil not in self.dead_coils]
        return [coil - sum(dead < coil for dead in self.dead_coils) for coil in left]

    def with_gaps(self, by_coil: Sequence[float | None]) -> list[float | None]:
        """Figures of the coils that are left, in the scan's order: None for those left out."""
        figures = list(by_coil)
        for coil in self.dead_coils:
            figures.insert(coil, None)
        return figures

    def findings(self) -> list[Finding]:
        """Says that something was left out, if it was."""
        if not self.dead_coils and not self.spikes:
            return []
        return [
            Finding(
                "excluded",
                "info",
                f"{len(self.dead_coils)} coil(s) and {self.spikes} spike(s) were left out as the setting exclude asks: "
                f"leave it empty to use everything.",
                "settings",
                {"coils": len(self.dead_coils), "spikes": self.spikes},
            )
        ]


def leave_out(
    scan: Scan, settings: Settings, report: Callable[[str, float], None]
) -> tuple[Scan, Inspection | None, Excluded]:
    """Look for what `settings.exclude` names, and leave it out.

    Parameters
    ----------
    scan : Scan
    settings : Settings
    report : callable
        Called as report(stage, fraction).

    Returns
    -------
    scan : Scan
        The given one where there is nothing to leave out.
    inspection : Inspection or None
        Of the whole scan; None when nothing was asked for, and so nothing read.
    excluded : Excluded
    """
    if not settings.exclude:
        return scan, None, Excluded()
    inspector = inspector_of(scan)
    planes = inspector.source.planes()
    for done, index in enumerate(planes):
        report("inspect", done / len(planes) / 2)
        inspector.read(index)
    inspection = inspector.finish()
    excluded = Excluded(
        tuple(inspection.channels["dead"]) if "dead-coils" in settings.exclude else (),
        inspector.spikes.count if "spikes" in settings.exclude else 0,
    )
    if excluded.dead_coils:
        scan = without_coils(scan, excluded.dead_coils)
    if excluded.spikes:
        scan = replace(scan, drops_spikes=True)
    return scan, inspection, excluded


def without_coils(scan: Scan, left_out: Sequence[int]) -> Scan:
    """A view of a scan with some coils taken out of all its arrays."""
    kept = [coil for coil in range(scan.coils) if coil not in left_out]

    def view(array: LabelledArray | None) -> LabelledArray | None:
        if array is None or "coil" not in array.labels:
            return array
        return LabelledArray(_SomeCoils(array.data, array.labels.index("coil"), kept), array.labels)

    kspace = view(scan.kspace_array)
    assert kspace is not None
    return replace(
        scan,
        kspace_array=kspace,
        noise_array=view(scan.noise_array),
        reference_array=view(scan.reference_array),
        sensitivity_array=view(scan.sensitivity_array),
    )


class _SomeCoils:
    """Storage of which some positions of one axis are not shown."""

    def __init__(self, data: ArrayLike, axis: int, kept: list[int]) -> None:
        self._data, self._axis, self._kept = data, axis, kept
        self.shape = (*data.shape[:axis], len(kept), *data.shape[axis + 1 :])
        self.dtype = getattr(data, "dtype", np.dtype(np.complex64))

    def __getitem__(self, key: tuple[Any, ...]) -> Any:
        coil = key[self._axis]
        if not isinstance(coil, slice):
            return self._data[(*key[: self._axis], self._kept[coil], *key[self._axis + 1 :])]
        part = np.asarray(self._data[(*key[: self._axis], slice(None), *key[self._axis + 1 :])])
        before = sum(isinstance(index, slice) for index in key[: self._axis])
        return np.take(part, self._kept[coil], axis=before)
