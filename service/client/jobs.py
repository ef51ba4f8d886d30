"""One job on the service: wait for it, look at its results, keep them."""

from __future__ import annotations

import json
import os
import tempfile
import time
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from service.client.errors import JobFailed, WaitTimedOut
from service.client.transport import Transport
from service.progress import ProgressLine

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

_FINISHED = frozenset({"successful", "failed", "dismissed"})
#: A service that is being restarted is waited for this long (seconds).
_WAIT_PATIENCE = 60.0
_LONG_POLL_SECONDS = 20
_PROGRESS_POLL_SECONDS = 1


class Job:
    """A reconstruction on the service.

    Attributes
    ----------
    facts : dict
        The job as the service last described it: `id`, `kind`, `label`, `scan`, `state`, `stage`, `progress`,
        `settings`, `error`, `caution` and the rest.
    """

    def __init__(self, transport: Transport, facts: Mapping[str, Any]) -> None:
        self._transport = transport
        self.facts = dict(facts)

    def __repr__(self) -> str:
        return f"Job(id={self.id!r}, state={self.state!r})"

    @property
    def id(self) -> str:
        """Identifier of the job."""
        return str(self.facts["id"])

    @property
    def state(self) -> str:
        """`accepted`, `running`, `successful`, `failed` or `dismissed`, as last heard."""
        return str(self.facts["state"])

    @property
    def stage(self) -> str | None:
        """What the worker was doing, as last heard."""
        stage = self.facts.get("stage")
        return None if stage is None else str(stage)

    @property
    def progress(self) -> float:
        """Fraction done, from 0 to 1, as last heard."""
        return float(self.facts.get("progress") or 0.0)

    @property
    def is_finished(self) -> bool:
        """Whether the job had ended, in whatever way, as last heard."""
        return self.state in _FINISHED

    def refresh(self) -> Job:
        """Ask the service for the job as it is now."""
        self.facts = self._transport.request("GET", self._path()).json()
        return self

    def wait(self, *, progress: bool = False, timeout: float | None = None) -> Job:
        """Wait until the job is done.

        Parameters
        ----------
        progress : bool
            Show a progress bar on standard error.
        timeout : float, optional
            Seconds to wait at most; the job goes on afterwards.

        Raises
        ------
        JobFailed
            The job ended as `failed` or `dismissed`.
        WaitTimedOut
            It was not done within `timeout`.
        ServiceUnreachable
            The service was gone for more than a minute.
        """
        deadline = None if timeout is None else time.monotonic() + timeout
        line = ProgressLine() if progress else None
        try:
            self._show(line)
            while not self.is_finished:
                left = None if deadline is None else deadline - time.monotonic()
                if left is not None and left <= 0:
                    raise WaitTimedOut(
                        f"Job {self.id} is not done after {timeout:g} s ({self.state}): it goes on."
                    )
                self._poll(_PROGRESS_POLL_SECONDS if line else _LONG_POLL_SECONDS, left)
                self._show(line)
        finally:
            if line:
                line.close()
        if self.state != "successful":
            raise JobFailed(self.id, self.state, self.facts.get("error"))
        return self

    def report(self) -> dict[str, Any]:
        """The data-consistency report of a successful job."""
        answer = self._transport.request("GET", self._path("report"), headers={"Accept": "application/json"})
        report: dict[str, Any] = answer.json()
        return report

    def image(self) -> NDArray[np.complex64]:
        """The image of a successful job.

        Returns
        -------
        ndarray of complex64
            Labelled axes as in ``/image`` of the result file, for example (y, x) or (slice, y, x).
        """
        import h5py

        with tempfile.TemporaryFile() as file:
            self._transport.download(self._path("image.h5"), file)
            with h5py.File(file, "r") as result:
                image: NDArray[np.complex64] = result["image"][()]
        return image

    def save(self, folder: str | os.PathLike[str]) -> list[Path]:
        """Write `image.h5`, `report.json` and `image.png` into a folder, which is made when missing.

        Each file appears under its name when it is complete, never before.

        Returns
        -------
        list of Path
            The three files.
        """
        report = json.dumps(self.report(), indent=2, ensure_ascii=False).encode() + b"\n"
        target = Path(folder)
        target.mkdir(parents=True, exist_ok=True)
        paths = [target / "image.h5", target / "report.json", target / "image.png"]
        with tempfile.TemporaryDirectory(prefix=".collect-", dir=target) as scratch:
            kept = [Path(scratch) / path.name for path in paths]
            with kept[0].open("w+b") as file:
                self._transport.download(self._path("image.h5"), file)
            kept[1].write_bytes(report)
            with kept[2].open("w+b") as file:
                self._transport.download(self._path("pictures/image.png"), file)
            for source, path in zip(kept, paths, strict=True):
                source.replace(path)
        return paths

    def dismiss(self) -> Job:
        """End a waiting or running job; its state becomes `dismissed`."""
        self.facts = self._transport.request("POST", self._path("dismiss")).json()
        return self

    def delete(self) -> None:
        """Remove a finished job and its results from the service."""
        self._transport.request("DELETE", self._path())

    def _path(self, tail: str = "") -> str:
        return f"/v1/jobs/{self.id}" + (f"/{tail}" if tail else "")

    def _poll(self, seconds: float, left: float | None) -> None:
        """Hear of the job when it is done, or after `seconds`; a service that answers at once is not hammered."""
        asked_at = time.monotonic()
        hold = seconds if left is None else min(seconds, max(1.0, left))
        answer = self._transport.request(
            "GET", self._path(), headers={"Prefer": f"wait={round(hold)}"}, patience=_WAIT_PATIENCE
        )
        self.facts = answer.json()
        if not self.is_finished and time.monotonic() - asked_at < 0.5:
            time.sleep(0.5 if left is None else min(0.5, max(0.0, left)))

    def _show(self, line: ProgressLine | None) -> None:
        if line is None:
            return
        stage = self.state if self.is_finished else self.stage or self._waiting()
        line.update(stage, 1.0 if self.state == "successful" else self.progress, self._seconds_left())

    def _waiting(self) -> str:
        position = self.facts.get("queue_position")
        return "waiting" if position is None else f"waiting, position {position} in the queue"

    def _seconds_left(self) -> float | None:
        seconds = self.facts.get("estimated_seconds_left")
        return None if seconds is None else float(seconds)
