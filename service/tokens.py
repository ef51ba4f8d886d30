"""Who may call: the owner's token, written at the first start and compared in constant time."""

from __future__ import annotations

import hashlib
import hmac
import os
import secrets
import stat
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from service.errors import Unauthorised
from service.settings import SettingError

OWNER: Final = "owner"
_CHALLENGE: Final = 'Bearer realm="fallow"'


@dataclass(frozen=True)
class Principal:
    """Who a request comes from; `owner` is stored with everything that it makes."""

    owner: str


class Tokens:
    """The tokens that are accepted.

    Parameters
    ----------
    owner_token : str
        Kept as its SHA-256 only.
    """

    def __init__(self, owner_token: str) -> None:
        self._owner_digest = _digest(owner_token)

    def principal(self, authorization: str | None) -> Principal:
        """Tell whose token an Authorization header carries.

        Raises
        ------
        Unauthorised
            No token or an unknown one; carries the `WWW-Authenticate` field.
        """
        if not authorization:
            raise Unauthorised(
                "the request carries no token: send `Authorization: Bearer TOKEN`; the owner's is in the file `token` "
                "of the data folder",
                headers={"WWW-Authenticate": _CHALLENGE},
            )
        scheme, _, token = authorization.partition(" ")
        # Digests have one length whatever was sent, so that the comparison takes one time.
        if scheme.lower() == "bearer" and hmac.compare_digest(_digest(token.strip()), self._owner_digest):
            return Principal(OWNER)
        raise Unauthorised(
            "the token is unknown here: send `Authorization: Bearer TOKEN` with the one in the file `token` of the "
            "data folder",
            headers={"WWW-Authenticate": f'{_CHALLENGE}, error="invalid_token"'},
        )


def owner_token(path: Path) -> str:
    """Read the owner's token, or write a new one with mode 0600 where there is none.

    Raises
    ------
    SettingError
        Others may read the file, or it holds no token.
    """
    try:
        descriptor = os.open(path, os.O_RDONLY | os.O_NOFOLLOW)
    except FileNotFoundError:
        return _write_new(path)
    with os.fdopen(descriptor, encoding="ascii") as file:
        if stat.S_IMODE(os.fstat(file.fileno()).st_mode) & 0o077:
            raise SettingError(
                f"others may read the token file {path}: remove it, and the next start writes a new token; or, if "
                "nobody else has read it, run `chmod 600` on it"
            )
        token = file.read().strip()
    if not token:
        raise SettingError(
            f"the token file {path} is empty: remove it, and the next start writes a new token"
        )
    return token


def _write_new(path: Path) -> str:
    token = secrets.token_urlsafe(32)
    draft = path.with_name(f".{path.name}.{secrets.token_hex(8)}")
    descriptor = os.open(draft, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    try:
        with os.fdopen(descriptor, "w", encoding="ascii") as file:
            file.write(token + "\n")
            file.flush()
            os.fsync(file.fileno())
        try:
            # A link never replaces a token that another process wrote in the meantime.
            os.link(draft, path)
        except FileExistsError:
            return owner_token(path)
    finally:
        draft.unlink()
    return token


def _digest(token: str) -> bytes:
    return hashlib.sha256(token.encode("utf-8", "surrogateescape")).digest()
