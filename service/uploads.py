"""Receiving a scan file: streamed to disk, counted and digested on the way."""

from __future__ import annotations

import asyncio
import base64
import binascii
import hashlib
import secrets
from collections.abc import AsyncIterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO, Final

from service.errors import Malformed, Stalled, TooLarge, WrongMediaType

SCAN_MEDIA_TYPE: Final = "application/x-hdf5"
#: Digest algorithms that a `Repr-Digest` may name (RFC 9530), and their lengths in bytes.
_ALGORITHMS: Final = {"sha-256": ("sha256", 32), "sha-512": ("sha512", 64)}
_WRITE_AT: Final = 1 << 20


@dataclass(frozen=True)
class Upload:
    """A received file that nobody has looked into yet."""

    path: Path
    sha256: str
    bytes: int

    @property
    def preview(self) -> Path:
        """Where its quick look is drawn."""
        return self.path.with_suffix(".png")

    def remove(self) -> None:
        """Leave nothing behind."""
        self.path.unlink(missing_ok=True)
        self.preview.unlink(missing_ok=True)


def check_announcement(content_type: str | None, content_length: str | None, limit: int) -> None:
    """Refuse by the header alone, before the body is read.

    Raises
    ------
    WrongMediaType, TooLarge, Malformed
    """
    named = (content_type or "").partition(";")[0].strip().lower()
    if named != SCAN_MEDIA_TYPE:
        received = f"of the type {named}" if named else "without a Content-Type"
        raise WrongMediaType(
            f"the body is {received}; accepted is {SCAN_MEDIA_TYPE}: send the scan file as it is, for example with "
            f"curl --data-binary @scan.h5 -H 'Content-Type: {SCAN_MEDIA_TYPE}'",
            headers={"Accept": SCAN_MEDIA_TYPE},
        )
    if content_length is not None and content_length.isdecimal():
        if int(content_length) > limit:
            raise _too_large(f"{content_length} bytes", limit)
        if int(content_length) == 0:
            raise _empty()


async def receive(
    body: AsyncIterator[bytes], folder: Path, *, limit: int, stall_seconds: float, repr_digest: str | None
) -> Upload:
    """Write a body to a new file; on any refusal, and when the sender goes away, nothing is left of it.

    Raises
    ------
    Malformed
        Empty body, or one that differs from its `Repr-Digest`.
    TooLarge, Stalled
    """
    expected = parse_digests(repr_digest)
    hashes = {"sha256": hashlib.sha256(), **{name: hashlib.new(name) for name, _ in expected}}
    path = folder / f"{secrets.token_hex(16)}.h5"
    received = 0
    try:
        with path.open("xb") as file:
            path.chmod(0o600)
            waiting = bytearray()
            async for chunk in _unstalled(body, stall_seconds):
                received += len(chunk)
                if received > limit:
                    raise _too_large("more", limit)
                waiting += chunk
                if len(waiting) >= _WRITE_AT:
                    await asyncio.to_thread(_take_in, file, hashes, bytes(waiting))
                    waiting.clear()
            await asyncio.to_thread(_take_in, file, hashes, bytes(waiting))
        if received == 0:
            raise _empty()
        for name, digest in expected:
            if hashes[name].digest() != digest:
                raise Malformed(
                    f"the {received} bytes that arrived do not match the Repr-Digest sent with them: the upload was "
                    "damaged on its way, or the digest is that of another file; send it again"
                )
    except BaseException:
        path.unlink(missing_ok=True)
        raise
    return Upload(path, hashes["sha256"].hexdigest(), received)


def parse_digests(header: str | None) -> list[tuple[str, bytes]]:
    """Read a `Repr-Digest` field: names as `hashlib` has them, and digests.

    Raises
    ------
    Malformed
        No digest of a known algorithm, or one that is not well formed.
    """
    if header is None:
        return []
    found = []
    for member in header.split(","):
        algorithm, _, value = member.strip().partition("=")
        if algorithm.lower() not in _ALGORITHMS:
            continue
        name, length = _ALGORITHMS[algorithm.lower()]
        try:
            digest = base64.b64decode(value.strip().removeprefix(":").removesuffix(":"), validate=True)
        except (binascii.Error, ValueError):
            digest = b""
        if len(digest) != length or not value.strip().startswith(":"):
            raise Malformed(
                f"the Repr-Digest member {member.strip()!r} is not well formed: send `{algorithm}=:BASE64:` (RFC 9530)"
            )
        found.append((name, digest))
    if not found:
        raise Malformed(
            f"the Repr-Digest {header!r} names no known algorithm: send one of {', '.join(_ALGORITHMS)}"
        )
    return found


def repr_digest(sha256: str) -> str:
    """`Repr-Digest` of content with a SHA-256 given in hexadecimal."""
    return f"sha-256=:{base64.b64encode(bytes.fromhex(sha256)).decode()}:"


async def _unstalled(body: AsyncIterator[bytes], seconds: float) -> AsyncIterator[bytes]:
    while True:
        try:
            chunk = await asyncio.wait_for(anext(body), seconds)
        except StopAsyncIteration:
            return
        except TimeoutError:
            raise Stalled(
                f"no data arrived for {seconds:g} s and the upload was given up: send the file again",
                headers={"Connection": "close"},
            ) from None
        yield chunk


def _take_in(file: BinaryIO, hashes: dict[str, Any], chunk: bytes) -> None:
    file.write(chunk)
    for digest in hashes.values():
        digest.update(chunk)


def _too_large(received: str, limit: int) -> TooLarge:
    return TooLarge(
        f"the body has {received}; accepted are at most {limit} bytes: send a smaller scan, or have the limit "
        "FALLOW_UPLOAD_LIMIT of the service raised"
    )


def _empty() -> Malformed:
    return Malformed(f"the body is empty: send the scan file as the body, of type {SCAN_MEDIA_TYPE}")
