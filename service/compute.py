"""The computing process: one reconstruction, started by a worker as ``python -m service.compute PARENT``.

It reads its order as JSON from standard input, writes results into the folder named there and tells its parent about
progress and outcome in lines of JSON. It knows neither database nor queue: whatever happens to it, the worker decides.
"""

from __future__ import annotations

import json
import os
import sys
import time
from pathlib import Path
from typing import Any, Final

from service.process import die_with_parent, private_output

#: At most this many progress lines a second.
_LINES_PER_SECOND: Final = 10.0
_NICENESS: Final = 5

IMAGE: Final = "image.h5"
REPORT: Final = "report.json"
#: Picture names and what each shows.
PICTURES: Final = {"image": "magnitude of the image"}


class Teller:
    """Tells the parent, one JSON object a line."""

    def __init__(self, descriptor: int) -> None:
        self._descriptor = descriptor
        self._told_at = float("-inf")
        self._stage: str | None = None

    def progress(self, stage: str, fraction: float) -> None:
        """Progress callback of the pipeline."""
        at = time.monotonic()
        if stage != self._stage or at - self._told_at >= 1 / _LINES_PER_SECOND:
            self.tell(stage=stage, progress=float(fraction))
            self._stage, self._told_at = stage, at

    def tell(self, **message: Any) -> None:
        """Write one message."""
        line = memoryview(json.dumps(message, allow_nan=False).encode() + b"\n")
        while line:
            line = line[os.write(self._descriptor, line) :]


def compute(order: dict[str, Any], teller: Teller) -> None:
    """Carry out one order: image, report and pictures into its folder, sealed with a manifest.

    Parameters
    ----------
    order : dict
        `scan` (path), `scan_sha256`, `settings`, `folder`, `title`.
    """
    # Imported here, so that a failure to import is told like any other.
    from recon.pipeline import reconstruct_file
    from recon.settings import parse_settings
    from service.memory import memory_limit
    from service.pictures import result_png
    from service.provenance import add_duration, collect
    from service.settings import computing_threads
    from service.store.files import seal

    settings = parse_settings(order["settings"])
    folder = Path(order["folder"])
    started = time.monotonic()
    provenance = collect(order["scan_sha256"], settings)
    report = reconstruct_file(
        Path(order["scan"]),
        folder / IMAGE,
        settings,
        progress=teller.progress,
        provenance=provenance,
        threads=computing_threads(),
        memory_limit_bytes=memory_limit(),
    )
    add_duration(folder / IMAGE, report, time.monotonic() - started)
    (folder / REPORT).write_text(json.dumps(report, ensure_ascii=False, allow_nan=False), encoding="utf-8")
    (folder / "image.png").write_bytes(result_png(folder / IMAGE, title=order["title"]))
    seal(folder)
    teller.tell(done=True)


def main() -> int:
    """Run as a process of its own."""
    die_with_parent(int(sys.argv[1]))
    teller = Teller(private_output())
    os.nice(_NICENESS)
    order = json.load(sys.stdin)
    from recon.errors import ReconError

    try:
        compute(order, teller)
    except ReconError as error:
        from service.errors import problem_of

        teller.tell(failed=problem_of(error)[0])
    except MemoryError:
        from service.errors import INSUFFICIENT_MEMORY, problem

        detail = "the memory of the worker does not suffice for this scan with these settings"
        teller.tell(failed=problem(INSUFFICIENT_MEMORY, detail))
    except OSError as error:
        from service.errors import INTERNAL, kind_of, problem_of

        if kind_of(error) is INTERNAL:
            raise
        teller.tell(failed=problem_of(error)[0])
    return 0


if __name__ == "__main__":
    sys.exit(main())
