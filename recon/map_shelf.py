"""Coil maps of the slices now worked on, shared between threads."""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable

from recon.coils.maps import CoilMaps, MapFigures
from recon.preparation import Preparation


class MapShelf:
    """Maps of the slices now worked on, made once by whichever thread needs them first."""

    def __init__(self, preparation: Preparation, tell: Callable[[str], None], size: int) -> None:
        self.preparation, self.tell, self.size = preparation, tell, size
        self.figures: dict[int, MapFigures] = {}
        self._kept: OrderedDict[int, CoilMaps] = OrderedDict()
        self._locks: dict[int, threading.Lock] = {}
        self._lock = threading.Lock()

    def maps_of(self, position: int) -> CoilMaps | None:
        """Maps of one slice; None for the coil-by-coil method, which needs none."""
        if self.preparation.map_method is None:
            return None
        with self._lock:
            lock = self._locks.setdefault(position, threading.Lock())
        with lock:
            maps = self._kept.get(position)
            if maps is None:
                self.tell("coil-maps")
                maps = self.preparation.make_maps(position)
        with self._lock:
            self.figures[position] = maps.figures
            self._kept[position] = maps
            while len(self._kept) > self.size:
                self._kept.popitem(last=False)
        return maps
