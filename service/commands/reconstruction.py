"""One reconstruction in this process, its files complete or absent."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import signal
import tempfile
import time
from collections.abc import Iterator, Mapping
from contextlib import ExitStack, contextmanager
from pathlib import Path
from types import FrameType
from typing import Any

from recon.pipeline import reconstruct_file
from recon.settings import parse_settings
from service.memory import memory_limit
from service.pictures import result_png
from service.progress import ProgressLine
from service.provenance import add_duration, collect
from service.settings import computing_threads


def reconstruct_to_files(
    scan: Path,
    settings: Mapping[str, Any],
    *,
    image: Path,
    report: Path | None = None,
    picture: Path | None = None,
) -> dict[str, Any]:
    """Reconstruct a scan file and write image, report and picture.

    Everything is written beside its place first and renamed when all of it is complete: an error, an interruption or a
    full disk leaves no file, and one that was there before stays as it was.

    Returns
    -------
    dict
        The report.

    Raises
    ------
    recon.errors.InvalidScan, recon.errors.InvalidSettings
    """
    checked = parse_settings(settings)
    with scan.open("rb") as file:
        sha256 = hashlib.file_digest(file, "sha256").hexdigest()
    with ExitStack() as stack:
        stack.enter_context(_ended_by_signal())
        scratch = {
            path: Path(stack.enter_context(_scratch_folder(path))) / path.name
            for path in (image, report, picture)
            if path is not None
        }
        started = time.monotonic()
        with ProgressLine() as line:
            found: dict[str, Any] = reconstruct_file(
                scan,
                scratch[image],
                checked,
                progress=line.update,
                provenance=collect(sha256, checked),
                threads=computing_threads(),
                memory_limit_bytes=memory_limit(),
            )
        add_duration(scratch[image], found, time.monotonic() - started)
        if report is not None:
            text = json.dumps(found, indent=2, ensure_ascii=False, allow_nan=False)
            scratch[report].write_text(text + "\n", encoding="utf-8")
        if picture is not None:
            scratch[picture].write_bytes(result_png(scratch[image], title=scan.name))
        for kept in scratch.values():
            _to_disk(kept)
        for path, kept in scratch.items():
            kept.replace(path)
    return found


@contextmanager
def _scratch_folder(path: Path) -> Iterator[str]:
    folder = tempfile.mkdtemp(prefix=f".{path.name}.", dir=path.resolve().parent)
    try:
        yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)


@contextmanager
def _ended_by_signal() -> Iterator[None]:
    """Turn a polite request to end into an exception, so that scratch folders go."""

    def end(number: int, frame: FrameType | None) -> None:
        raise SystemExit(128 + number)

    before = signal.signal(signal.SIGTERM, end)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


def _to_disk(path: Path) -> None:
    with path.open("rb") as file:
        os.fsync(file.fileno())
