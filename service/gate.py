"""The gate: an uploaded file is opened only by a child process with limits, never in a process of the service."""

from __future__ import annotations

import asyncio
import json
import logging
import os
import signal
from pathlib import Path
from typing import Any, Final

from service.errors import ScanRefused
from service.process import how_it_ended, python_command
from service.settings import ServiceSettings, child_environment

log = logging.getLogger("fallow")

_GIB: Final = 1 << 30
_LONGEST_ANSWER: Final = 16 << 20
#: Waiting for disk or for a processor does not count as work, so that the clock runs longer than processor time.
_PATIENCE: Final = 5.0


class Gate:
    """Opens uploads, a few at a time.

    Parameters
    ----------
    settings : ServiceSettings
        Supplies the limits.
    module : str
        Module that the child process runs.
    """

    def __init__(self, settings: ServiceSettings, *, module: str = "service.gatekeeper") -> None:
        self._settings = settings
        self._module = module
        self._places = asyncio.Semaphore(2)

    async def examine(self, upload: Path, preview: Path) -> dict[str, Any]:
        """Check a scan file and draw its quick look.

        Parameters
        ----------
        upload : Path
            The file.
        preview : Path
            Where the quick look goes.

        Returns
        -------
        dict
            `facts` as `recon.inspection.Inspection.as_dict` gives them, and `title`.

        Raises
        ------
        ScanRefused
            The file is no acceptable scan, or examining it took more memory or time than allowed.
        """
        size = upload.stat().st_size
        seconds = self._settings.gate_seconds + size / _GIB * self._settings.gate_seconds_per_gib
        arguments = (
            str(os.getpid()),
            str(upload),
            str(preview),
            str(self._settings.gate_memory),
            str(round(seconds)),
        )
        async with self._places:
            child = await asyncio.create_subprocess_exec(
                *python_command(self._module, *arguments),
                stdin=asyncio.subprocess.DEVNULL,
                stdout=asyncio.subprocess.PIPE,
                stderr=asyncio.subprocess.PIPE,
                env=child_environment(),
                limit=_LONGEST_ANSWER,
            )
            try:
                answer, words = await asyncio.wait_for(child.communicate(), _PATIENCE * seconds)
            except TimeoutError:
                raise ScanRefused(
                    f"examining the file took longer than {_PATIENCE * seconds:.0f} s and was given up: send a smaller "
                    "file, or the same one when the service is less busy"
                ) from None
            finally:
                if child.returncode is None:
                    child.kill()
                    await child.wait()
        return self._judge(child.returncode, answer, words, seconds)

    def _judge(self, returncode: int | None, answer: bytes, words: bytes, seconds: float) -> dict[str, Any]:
        if returncode == 0 and len(answer) <= _LONGEST_ANSWER:
            document = _parsed(answer)
            if "facts" in document:
                return document
            if "refused" in document:
                raise ScanRefused(document["refused"])
        if returncode is not None and returncode == -signal.SIGXCPU:
            raise ScanRefused(
                f"examining the file took more than {seconds:.0f} s of processor time: send a smaller file"
            )
        ending = how_it_ended(returncode if returncode is not None else 0)
        log.warning(
            "the gate's process ended by %s: %s", ending, words[-2000:].decode("utf-8", "replace").strip()
        )
        raise ScanRefused(
            f"the process that examined the file ended by {ending}: the file is damaged or beyond the limits; check "
            "that it opens with h5py, or write it anew"
        )


def _parsed(answer: bytes) -> dict[str, Any]:
    try:
        document = json.loads(answer)
    except ValueError:
        return {}
    return document if isinstance(document, dict) else {}
