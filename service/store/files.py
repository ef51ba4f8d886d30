"""Files of the service: complete or absent, whatever process dies when.

Everything is written under another name, synchronised to disk, and then renamed into its place.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from pathlib import Path
from typing import Any, Final

MANIFEST: Final = "manifest.json"


class Files:
    """The folders of one data folder.

    Attributes
    ----------
    incoming : Path
        Uploads that are not accepted yet.
    scans : Path
        `ID.h5` and `ID.png` of every accepted scan.
    results : Path
        One folder for every finished job, complete when it is there.
    drafts : Path
        Result folders that are being written.
    locks : Path
        Lock files of processes.
    """

    def __init__(self, data: Path) -> None:
        self.data = data
        self.incoming = data / "incoming"
        self.scans = data / "scans"
        self.results = data / "results"
        self.drafts = data / "drafts"
        self.locks = data / "locks"

    def create(self) -> None:
        """Make the folders, readable by their owner alone."""
        for folder in (self.data, self.incoming, self.scans, self.results, self.drafts, self.locks):
            folder.mkdir(mode=0o700, parents=True, exist_ok=True)

    def scan(self, scan_id: str) -> Path:
        """The file of an accepted scan."""
        return self.scans / f"{scan_id}.h5"

    def preview(self, scan_id: str) -> Path:
        """The quick look of an accepted scan."""
        return self.scans / f"{scan_id}.png"

    def result(self, job_id: str) -> Path:
        """The folder with the results of a successful job."""
        return self.results / job_id

    def accept_scan(self, scan_id: str, upload: Path, preview: Path) -> None:
        """Move a checked upload and its quick look into their places."""
        for source, target in ((preview, self.preview(scan_id)), (upload, self.scan(scan_id))):
            synchronise(source)
            source.rename(target)
        synchronise(self.scans)

    def remove_scan(self, scan_id: str) -> None:
        """Remove the files of a scan."""
        for path in (self.scan(scan_id), self.preview(scan_id)):
            path.unlink(missing_ok=True)

    def new_draft(self, job_id: str, attempt: int) -> Path:
        """Make an empty folder for the results of one attempt; those of attempts before go."""
        for left in self.drafts.glob(f"{job_id}-*"):
            self.remove_draft(left)
        draft = self.drafts / f"{job_id}-{attempt}"
        draft.mkdir(mode=0o700)
        return draft

    def remove_draft(self, draft: Path) -> None:
        """Remove a draft, if it is still there."""
        shutil.rmtree(draft, ignore_errors=True)

    def publish(self, job_id: str, draft: Path) -> None:
        """Make a complete draft the result of a job; one that is there already stays."""
        try:
            draft.rename(self.result(job_id))
        except OSError:
            # Another attempt was faster, and what it published is complete.
            if not self.result(job_id).is_dir():
                raise
            shutil.rmtree(draft, ignore_errors=True)
        synchronise(self.results)

    def published(self, job_id: str) -> dict[str, Any] | None:
        """The manifest of a job's results, or None where there are none that are complete."""
        folder = self.result(job_id)
        try:
            manifest: dict[str, Any] = json.loads((folder / MANIFEST).read_text(encoding="utf-8"))
            is_whole = all(
                (folder / name).stat().st_size == facts["bytes"] for name, facts in manifest.items()
            )
        except (OSError, ValueError, KeyError, TypeError):
            return None
        return manifest if is_whole else None

    def remove_result(self, job_id: str) -> None:
        """Remove the results of a job; they vanish in one step."""
        grave = self.drafts / f"{job_id}-removed"
        try:
            self.result(job_id).rename(grave)
        except FileNotFoundError:
            return
        shutil.rmtree(grave, ignore_errors=True)

    def clear_incoming(self) -> None:
        """Remove what uploads left that a dead process was receiving."""
        for path in self.incoming.iterdir():
            path.unlink(missing_ok=True)


def synchronise(path: Path) -> None:
    """Force a file or a folder to disk."""
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def seal(folder: Path) -> dict[str, Any]:
    """Force every file of a draft to disk and write its manifest last.

    Returns
    -------
    dict
        For each file name `bytes` and `sha256` (hexadecimal).
    """
    manifest: dict[str, Any] = {}
    for path in sorted(folder.iterdir()):
        with path.open("rb") as file:
            digest = hashlib.file_digest(file, "sha256").hexdigest()
            os.fsync(file.fileno())
            manifest[path.name] = {"bytes": path.stat().st_size, "sha256": digest}
    write_durably(folder / MANIFEST, json.dumps(manifest).encode())
    synchronise(folder)
    return manifest


def write_durably(path: Path, content: bytes) -> None:
    """Write a file of a draft and force it to disk."""
    with path.open("wb") as file:
        file.write(content)
        file.flush()
        os.fsync(file.fileno())


def free_bytes(folder: Path) -> int:
    """Space left on the disk of a folder."""
    return shutil.disk_usage(folder).free
