"""The client: an address, a token, and what can be asked of the service there."""

from __future__ import annotations

import os
import tempfile
import unicodedata
import uuid
from collections.abc import Iterator, Mapping
from functools import partial
from pathlib import Path
from types import TracebackType
from typing import Any, Self
from urllib.parse import quote

import httpx

from service.client.arrays import write_arrays
from service.client.errors import InputRefused
from service.client.jobs import Job
from service.client.transport import Transport, digest_header, file_body, is_loopback
from service.progress import ProgressLine
from service.settings import client_token, client_url

#: The service looks through a scan before it answers; a large one takes longer.
_CHECK_SECONDS = 120.0
_CHECK_SECONDS_PER_GIB = 240.0
#: A smaller scan is sent before anybody has seen the bar.
SHOWN_FROM_BYTES = 16 << 20


class Client:
    """Access to one Fallow service.

    Parameters
    ----------
    url : str, optional
        Address; by default that of ``FALLOW_URL``, else the service on this machine.
    token : str, optional
        By default that of ``FALLOW_TOKEN``, else, for a service on this machine, the owner's token in the local data
        folder.
    patience : float
        Seconds during which dropped connections are tried again.

    Raises
    ------
    InputRefused
        The address is not one of HTTP.
    """

    def __init__(self, url: str | None = None, token: str | None = None, *, patience: float = 3.0) -> None:
        address = url or client_url()
        if not address.startswith(("http://", "https://")):
            raise InputRefused(
                f"{address!r} is no address of a service: expected http://HOST:PORT or https://HOST."
            )
        found = token or client_token(is_local=is_loopback(address))
        if found and not all("!" <= character <= "~" for character in found):
            raise InputRefused(
                "The token is not well formed: expected printable ASCII characters without spaces; give it as it "
                "stands in the token file."
            )
        self._transport = Transport(address, found, patience=patience)

    @property
    def url(self) -> str:
        """Address of the service."""
        return self._transport.url

    def close(self) -> None:
        """Close the connections."""
        self._transport.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def submit(
        self,
        scan: str | os.PathLike[str] | Mapping[str, Any],
        settings: Mapping[str, Any] | None = None,
        *,
        label: str | None = None,
        priority: str = "routine",
        progress: bool = False,
    ) -> Job:
        """Send a scan and ask for its reconstruction.

        Parameters
        ----------
        scan : path or mapping of arrays
            A scan file (HDF5), or arrays as `service.client.arrays.write_arrays` takes them, for example
            ``{"kspace": samples, "axes": "coil,ky,kx", "mask": mask, "noise": noise}``.
        settings : mapping, optional
            Names and values of the settings; those left out keep their defaults.
        label : str, optional
            A name of your own for scan and job.
        priority : {"routine", "urgent"}
        progress : bool
            Show a progress bar on standard error while a large scan is sent.

        Returns
        -------
        Job

        Raises
        ------
        InputRefused
            The file is missing, the arrays make no scan, or the label is none; nothing was sent.
        RequestRefused
            The service refuses the scan or the settings; the exception carries the problem details.
        ServiceUnreachable
        """
        _check_label(label)
        sent = self.upload(scan, label=label, progress=progress)
        return self.reconstruct(str(sent["id"]), settings, label=label, priority=priority)

    def upload(
        self,
        scan: str | os.PathLike[str] | Mapping[str, Any],
        *,
        label: str | None = None,
        progress: bool = False,
    ) -> dict[str, Any]:
        """Send a scan alone; the same content again gives the same scan."""
        if isinstance(scan, Mapping):
            with tempfile.TemporaryDirectory(prefix="fallow-") as folder:
                path = Path(folder) / "scan.h5"
                write_arrays(path, scan)
                return self._upload_file(path, label, progress)
        return self._upload_file(Path(scan), label, progress)

    def reconstruct(
        self,
        scan_id: str,
        settings: Mapping[str, Any] | None = None,
        *,
        label: str | None = None,
        priority: str = "routine",
    ) -> Job:
        """Ask for the reconstruction of a scan that the service holds already."""
        order = {
            "kind": "reconstruction",
            "scan": scan_id,
            "settings": dict(settings or {}),
            "priority": priority,
            "label": label,
        }
        answer = self._transport.request(
            "POST",
            "/v1/jobs",
            json=order,
            headers={"Idempotency-Key": str(uuid.uuid4())},
            # The first try may still be at work when the second one arrives.
            is_retried=lambda response: response.status_code == httpx.codes.CONFLICT,
        )
        return Job(self._transport, answer.json())

    def job(self, job_id: str) -> Job:
        """One job by its identifier."""
        return Job(
            self._transport, self._transport.request("GET", f"/v1/jobs/{quote(job_id, safe='')}").json()
        )

    def jobs(self, *, label: str | None = None, state: str | None = None) -> Iterator[Job]:
        """Jobs of yours, newest first, optionally those of one label or state."""
        for facts in self._items("/v1/jobs", {"label": label, "state": state}):
            yield Job(self._transport, facts)

    def dismiss(self, job_id: str) -> Job:
        """End a waiting or running job."""
        return Job(
            self._transport,
            self._transport.request("POST", f"/v1/jobs/{quote(job_id, safe='')}/dismiss").json(),
        )

    def scan(self, scan_id: str) -> dict[str, Any]:
        """One scan: its axes, sampling facts and findings."""
        scan: dict[str, Any] = self._transport.request("GET", f"/v1/scans/{quote(scan_id, safe='')}").json()
        return scan

    def scans(self, *, label: str | None = None) -> Iterator[dict[str, Any]]:
        """Scans of yours, newest first."""
        return self._items("/v1/scans", {"label": label})

    def _upload_file(self, path: Path, label: str | None, progress: bool) -> dict[str, Any]:
        if not path.is_file():
            raise InputRefused(f"No scan file at {path}: check the path.")
        if not os.access(path, os.R_OK):
            raise InputRefused(f"The scan file {path} may not be read: check its permissions.")
        headers = {
            "Content-Type": "application/x-hdf5",
            "Content-Length": str(path.stat().st_size),
            "Repr-Digest": digest_header(path),
        }
        params = {} if label is None else {"label": label}
        with ProgressLine() as line:
            is_shown = progress and path.stat().st_size >= SHOWN_FROM_BYTES
            body = file_body(path, partial(line.update, "sending") if is_shown else None)
            answer = self._transport.request(
                "POST",
                "/v1/scans",
                params=params,
                headers=headers,
                body=body,
                answer_seconds=_CHECK_SECONDS + _CHECK_SECONDS_PER_GIB * path.stat().st_size / (1 << 30),
            )
        scan: dict[str, Any] = answer.json()
        return scan

    def _items(self, path: str, filters: Mapping[str, str | None]) -> Iterator[dict[str, Any]]:
        params = {name: value for name, value in filters.items() if value is not None}
        while True:
            page = self._transport.request("GET", path, params=params).json()
            yield from page["items"]
            if page.get("next") is None:
                return
            params["cursor"] = str(page["next"])


def _check_label(label: str | None) -> None:
    if label is not None and not 1 <= len(label) <= 200:
        raise InputRefused(f"The label has {len(label)} characters: expected 1 to 200, or none at all.")
    if label is not None and any(unicodedata.category(character) == "Cc" for character in label):
        raise InputRefused("The label holds control characters such as line breaks: leave them out.")
