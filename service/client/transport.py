"""HTTP exchanges with the service: dropped connections tried again, problems as exceptions, checked downloads."""

from __future__ import annotations

import base64
import hashlib
import ipaddress
import time
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import Any, Protocol

import httpx

from service.client.errors import (
    DamagedDownload,
    FallowError,
    RequestRefused,
    ServiceFault,
    ServiceUnreachable,
)

Body = Callable[[], Iterable[bytes]]


class RandomAccessFile(Protocol):
    """A binary file open for writing and reading back."""

    def write(self, data: bytes, /) -> int: ...
    def readinto(self, buffer: bytearray, /) -> int: ...
    def readable(self) -> bool: ...
    def seek(self, position: int, /) -> int: ...
    def tell(self) -> int: ...
    def truncate(self) -> int: ...
    def flush(self) -> None: ...


_CHUNK = 1 << 20
_CONNECT_SECONDS = 5.0
_ANSWER_SECONDS = 60.0
_FIRST_PAUSE = 0.1
_LONGEST_PAUSE = 2.0


class Transport:
    """Sends requests that may be repeated safely, until one is answered or `patience` (seconds) is used up.

    Every call of the API may be repeated: uploads of the same content give the same scan, submissions carry an
    idempotency key, dismissing twice is accepted.
    """

    def __init__(self, url: str, token: str | None, *, patience: float = 3.0) -> None:
        self.url = url.rstrip("/")
        self.patience = patience
        headers = {"Authorization": f"Bearer {token}"} if token else {}
        self._http = httpx.Client(
            base_url=self.url,
            headers=headers,
            timeout=httpx.Timeout(_ANSWER_SECONDS, connect=_CONNECT_SECONDS),
            # A proxy set for the outside world must not swallow calls to this machine.
            trust_env=not is_loopback(self.url),
        )

    def close(self) -> None:
        """Close the connections."""
        self._http.close()

    def request(
        self,
        method: str,
        path: str,
        *,
        params: Mapping[str, str] | None = None,
        headers: Mapping[str, str] | None = None,
        json: Any = None,
        body: Body | None = None,
        patience: float | None = None,
        answer_seconds: float = _ANSWER_SECONDS,
        is_retried: Callable[[httpx.Response], bool] = lambda response: False,
    ) -> httpx.Response:
        """Send one request and return the answer, of a 2xx status.

        Parameters
        ----------
        body : callable, optional
            Gives the content from its beginning; called anew for each try.
        patience : float, optional
            Seconds, from the first failure on, during which a dropped connection or a 503 is tried again.
        answer_seconds : float, optional
            Seconds after which a silent service counts as gone.
        is_retried : callable, optional
            Which further answers are worth another try.

        Raises
        ------
        ServiceUnreachable, RequestRefused, ServiceFault
        """
        patience = self.patience if patience is None else patience
        deadline: float | None = None
        pause = _FIRST_PAUSE
        while True:
            try:
                response = self._http.request(
                    method,
                    path,
                    params=dict(params or {}),
                    headers=dict(headers or {}),
                    json=json,
                    content=None if body is None else body(),
                    timeout=httpx.Timeout(answer_seconds, connect=_CONNECT_SECONDS),
                )
            except httpx.TransportError as error:
                # An upload may have taken long before it broke off: patience begins here.
                deadline = time.monotonic() + patience if deadline is None else deadline
                if time.monotonic() + pause > deadline:
                    raise self._unreachable(error) from error
            else:
                if response.is_success:
                    return response
                asked = _retry_after(response) if response.status_code in {429, 503} else 0.0
                deadline = time.monotonic() + patience if deadline is None else deadline
                is_worth_it = response.status_code in {429, 503} or is_retried(response)
                if not is_worth_it or time.monotonic() + max(pause, asked) > deadline:
                    raise self._failure(response)
                pause = max(pause, asked)
            time.sleep(pause)
            pause = min(2 * pause, _LONGEST_PAUSE)

    def download(
        self, path: str, target: RandomAccessFile, *, headers: Mapping[str, str] | None = None
    ) -> None:
        """Write the answer to GET `path` into `target`, going on where a dropped connection broke off.

        Raises
        ------
        DamagedDownload
            The content does not match its `Repr-Digest`.
        ServiceUnreachable, RequestRefused, ServiceFault
        """
        deadline: float | None = None
        pause = _FIRST_PAUSE
        etag: str | None = None
        while True:
            resume = {**(headers or {}), "Accept-Encoding": "identity"}
            if target.tell() and etag:
                resume |= {"Range": f"bytes={target.tell()}-", "If-Range": etag}
            try:
                with self._http.stream("GET", path, headers=resume) as response:
                    if not response.is_success:
                        response.read()
                        raise self._failure(response)
                    if response.status_code != httpx.codes.PARTIAL_CONTENT:
                        target.seek(0)
                        target.truncate()
                    etag = response.headers.get("ETag")
                    for chunk in response.iter_raw():
                        target.write(chunk)
                        if etag:  # What has arrived is kept: this is progress, and patience begins anew.
                            deadline, pause = None, _FIRST_PAUSE
                    _check_digest(target, response.headers.get("Repr-Digest"), path)
                    return
            except httpx.TransportError as error:
                deadline = time.monotonic() + self.patience if deadline is None else deadline
                if time.monotonic() + pause > deadline:
                    raise self._unreachable(error) from error
            time.sleep(pause)
            pause = min(2 * pause, _LONGEST_PAUSE)

    def _unreachable(self, error: httpx.TransportError) -> ServiceUnreachable:
        reason = str(error) or type(error).__name__
        return ServiceUnreachable(
            f"No service answers at {self.url} ({reason}): start one with `fallow serve`, or name its address with "
            "--url or FALLOW_URL."
        )

    def _failure(self, response: httpx.Response) -> FallowError:
        problem = self._problem(response)
        if response.status_code == httpx.codes.SERVICE_UNAVAILABLE:
            return ServiceUnreachable(str(RequestRefused(problem)))
        return (ServiceFault if response.status_code >= 500 else RequestRefused)(problem)

    def _problem(self, response: httpx.Response) -> Mapping[str, Any]:
        if response.headers.get("Content-Type", "").partition(";")[0].strip() == "application/problem+json":
            try:
                problem = response.json()
            except ValueError:
                problem = None
            if isinstance(problem, Mapping):
                return {"status": response.status_code, **problem}
        return {
            "title": response.reason_phrase,
            "status": response.status_code,
            "detail": f"{self.url} answered {response.status_code} {response.reason_phrase}, but not as Fallow does: "
            "check the address.",
        }


def file_body(path: Path, sent: Callable[[float], None] | None = None) -> Body:
    """Content of a file, for an upload; `sent` hears of the fraction that has gone out."""

    def chunks() -> Iterable[bytes]:
        size = path.stat().st_size
        with path.open("rb") as file:
            while chunk := file.read(_CHUNK):
                yield chunk
                if sent is not None:
                    sent(min(1.0, file.tell() / size))

    return chunks


def digest_header(path: Path) -> str:
    """`Repr-Digest` of a file (RFC 9530)."""
    with path.open("rb") as file:
        return f"sha-256=:{base64.b64encode(hashlib.file_digest(file, 'sha256').digest()).decode()}:"


def _check_digest(file: RandomAccessFile, header: str | None, path: str) -> None:
    for member in (header or "").split(","):
        algorithm, _, value = member.strip().partition("=")
        if algorithm != "sha-256":
            continue
        file.flush()
        file.seek(0)
        received = base64.b64encode(hashlib.file_digest(file, "sha256").digest()).decode()
        if received != value.strip(":"):
            raise DamagedDownload(f"What arrived from {path} differs from its digest: collect it again.")


def _retry_after(response: httpx.Response) -> float:
    try:
        return max(0.0, float(response.headers.get("Retry-After", "0")))
    except ValueError:
        return 0.0


def is_loopback(url: str) -> bool:
    """Whether an address is one of this machine."""
    host = httpx.URL(url).host
    try:
        return ipaddress.ip_address(host.strip("[]")).is_loopback
    except ValueError:
        return host == "localhost"
