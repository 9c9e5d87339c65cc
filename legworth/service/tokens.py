"""Bearer tokens: kept as hashes, compared in constant time.

A token is 256 random bits, so that its plain SHA-256 can be stored: nothing shorter than the token itself
can be guessed from it (passwords, which people choose, would need a slow hash).
"""

from __future__ import annotations

import hmac
import json
import secrets
from collections.abc import Iterable
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from hashlib import sha256
from pathlib import Path

from network import SettingError

__all__ = ["PERMISSIONS", "Token", "TokenFile"]

PERMISSIONS = ("ask", "sell", "count")
"""To ask questions, to sell and cancel seats, and to overwrite counts by the carrier's own."""


@dataclass(frozen=True)
class Token:
    """A token as it is kept: who holds it, what it permits, and its hash."""

    holder: str
    permissions: tuple[str, ...]
    digest: str
    made: str


class TokenFile:
    """Tokens in a JSON file of a store; a change of the file counts at once.

    Parameters
    ----------
    path
        The file; it need not exist.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._state: tuple[int, int] | None = None
        self._tokens: tuple[Token, ...] = ()

    def tokens(self) -> tuple[Token, ...]:
        """All tokens.

        Raises
        ------
        SettingError
            If the file is damaged.
        """
        try:
            status = self.path.stat()
        except FileNotFoundError:
            self._state, self._tokens = None, ()
            return ()
        state = (status.st_mtime_ns, status.st_size)
        if state != self._state:
            try:
                rows = json.loads(self.path.read_text(encoding="utf-8"))
                self._tokens = tuple(Token(**{**row, "permissions": tuple(row["permissions"])}) for row in rows)
            except (OSError, ValueError, TypeError, KeyError) as error:
                raise SettingError(f"{self.path} is damaged ({error}); restore it or make the tokens anew") from error
            self._state = state
        return self._tokens

    def make(self, holder: str, permissions: Iterable[str]) -> str:
        """Make a token and keep its hash.

        Returns
        -------
        str
            The token itself, which is nowhere kept.

        Raises
        ------
        SettingError
            If the holder has one already, or a permission is unknown.
        """
        wanted = tuple(dict.fromkeys(permissions))
        unknown = [name for name in wanted if name not in PERMISSIONS]
        if unknown or not wanted:
            raise SettingError(f"a token permits one or more of {', '.join(PERMISSIONS)}, not {unknown or 'nothing'}")
        if any(token.holder == holder for token in self.tokens()):
            raise SettingError(f"{holder!r} holds a token already; withdraw it first")
        token = secrets.token_urlsafe(32)
        made = datetime.now(UTC).isoformat(timespec="seconds")
        self._write((*self.tokens(), Token(holder, wanted, _digest(token), made)))
        return token

    def withdraw(self, holder: str) -> None:
        """Forget a token; SettingError if the holder has none."""
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

    def _write(self, tokens: Iterable[Token]) -> None:
        aside = self.path.with_name(f".{self.path.name}.part")
        try:
            aside.touch(mode=0o600)
            aside.write_text(json.dumps([asdict(token) for token in tokens], indent=2) + "\n", encoding="utf-8")
            aside.replace(self.path)
        except OSError as error:
            raise SettingError(f"cannot write {self.path} ({error.strerror}); mend its permissions") from error
        self._state = None


def _digest(token: str) -> str:
    return sha256(token.encode("utf-8", errors="surrogateescape")).hexdigest()
