"""Bearer tokens: kept as hashes, compared in constant time.

A token is 256 random bits, so that its plain SHA-256 can be stored: nothing shorter than the token itself
can be guessed from it (passwords, which people choose, would need a slow hash).
"""

from __future__ import annotations

import hmac
import json
import os
import secrets
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from hashlib import sha256
from pathlib import Path

import filelock

from legworth.service.errors import TokensDamagedError
from legworth.store.disk import held_folder
from network import SettingError

__all__ = ["PERMISSIONS", "Token", "TokenFile"]

PERMISSIONS = ("ask", "sell", "count")
"""To ask questions, to sell and cancel seats, and to overwrite counts by the carrier's own."""
LONGEST_HOLDER = 200


@dataclass(frozen=True)
class Token:
    """A token as it is kept: who holds it, what it permits, and its hash.

    Raises
    ------
    ValueError
        If one of them cannot be.
    """

    holder: str
    permissions: tuple[str, ...]
    digest: str
    made: str

    def __post_init__(self) -> None:
        if not (self.holder and self.holder.isprintable() and len(self.holder) <= LONGEST_HOLDER):
            raise ValueError(f"a holder has 1 to {LONGEST_HOLDER} printable characters")
        unknown = [name for name in self.permissions if name not in PERMISSIONS]
        if unknown or not self.permissions:
            raise ValueError(f"a token permits one or more of {', '.join(PERMISSIONS)}, not {unknown or 'nothing'}")
        if len(self.digest) != 64 or not set(self.digest) <= set("0123456789abcdef"):
            raise ValueError(f"the hash of {self.holder!r} is none")


class TokenFile:
    """Tokens in a JSON file of a store; a change of the file counts at once.

    Parameters
    ----------
    path
        The file; it need not exist.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._read: tuple[tuple[int, int, int], tuple[Token, ...]] | None = None

    def tokens(self) -> tuple[Token, ...]:
        """All tokens.

        Raises
        ------
        TokensDamagedError
            If the file is damaged or cannot be read.
        """
        try:
            status = self.path.stat()
            state = (status.st_ino, status.st_mtime_ns, status.st_size)
            if self._read is None or self._read[0] != state:
                rows = json.loads(self.path.read_text(encoding="utf-8"))
                found = tuple(Token(**{**row, "permissions": tuple(row["permissions"])}) for row in rows)
                self._read = (state, found)
            return self._read[1]
        except FileNotFoundError:
            return ()
        except (OSError, ValueError, TypeError, KeyError, AttributeError, RecursionError) as error:
            why = error.strerror if isinstance(error, OSError) else str(error)
            raise TokensDamagedError(
                f"{self.path.name} of the store is damaged ({why}); restore it, or remove it and make the tokens anew"
            ) from None

    def make(self, holder: str, permissions: Iterable[str]) -> str:
        """Make a token and keep its hash.

        Returns
        -------
        str
            The token itself, which is nowhere kept.

        Raises
        ------
        SettingError
            If the holder has one already or cannot be written, or a permission is unknown.
        """
        token = secrets.token_urlsafe(32)
        made = datetime.now(UTC).isoformat(timespec="seconds")
        try:
            fresh = Token(holder, tuple(dict.fromkeys(permissions)), _digest(token), made)
        except ValueError as error:
            raise SettingError(str(error)) from None
        with self._changing():
            if any(kept.holder == holder for kept in self.tokens()):
                raise SettingError(f"{holder!r} holds a token already; withdraw it first")
            self._write((*self.tokens(), fresh))
        return token

    def withdraw(self, holder: str) -> None:
        """Forget a token; SettingError if the holder has none."""
        with self._changing():
            kept = tuple(token for token in self.tokens() if token.holder != holder)
            if len(kept) == len(self.tokens()):
                raise SettingError(f"{holder!r} holds no token")
            self._write(kept)

    def holder_of(self, token: str) -> Token | None:
        """The kept token that this one matches; every kept hash is compared, each in constant time."""
        digest = _digest(token)
        found = None
        for kept in self.tokens():
            if hmac.compare_digest(kept.digest, digest):
                found = kept
        return found

    @contextmanager
    def _changing(self) -> Iterator[None]:
        """Keep others from changing the file meanwhile."""
        try:
            with filelock.FileLock(self.path.with_name(f".{self.path.name}.lock"), timeout=10):
                yield
        except filelock.Timeout:
            raise SettingError(f"another process is changing {self.path}; try again") from None
        except OSError as error:
            raise SettingError(f"cannot write {self.path} ({error.strerror}); mend its permissions") from error

    def _write(self, tokens: Iterable[Token]) -> None:
        """Replace the file by one rename, readable to its owner alone."""
        aside = self.path.with_name(f".{self.path.name}.part")
        aside.unlink(missing_ok=True)
        with held_folder(self.path.parent) as folder:
            handle = os.open(aside, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
            with os.fdopen(handle, "w", encoding="utf-8") as file:
                file.write(json.dumps([asdict(token) for token in tokens], indent=2) + "\n")
                file.flush()
                os.fsync(file.fileno())
            aside.replace(self.path)
            if folder is not None:
                os.fsync(folder)


def _digest(token: str) -> str:
    return sha256(token.encode("utf-8", errors="surrogateescape")).hexdigest()
