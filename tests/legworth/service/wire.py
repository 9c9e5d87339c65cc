"""A small HTTP/1.1 client on one kept-alive connection, light enough to load a server with."""

from __future__ import annotations

import asyncio
import json
from collections.abc import Mapping
from types import TracebackType
from typing import Any, Self

__all__ = ["Wire"]


class Wire:
    """One connection to a server on loopback.

    Parameters
    ----------
    port
        Where it listens.
    headers
        Sent with every request.
    """

    def __init__(self, port: int, headers: Mapping[str, str] | None = None) -> None:
        self.port = port
        self.fixed = "".join(f"{name}: {value}\r\n" for name, value in (headers or {}).items())
        self._reader: asyncio.StreamReader | None = None
        self._writer: asyncio.StreamWriter | None = None

    async def __aenter__(self) -> Self:
        return self

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.drop()

    def drop(self) -> None:
        """Give the connection up; the next request makes another."""
        if self._writer is not None:
            self._writer.close()
        self._reader = self._writer = None

    async def raw(self, method: str, path: str, body: bytes = b"", headers: str = "") -> tuple[int, bytes]:
        """Send a request and read status and body.

        Raises
        ------
        OSError, EOFError, ValueError
            If the connection breaks or what comes back is no answer.
        """
        head = f"{method} {path} HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Length: {len(body)}\r\n"
        status, _, answer = await self.exchange(f"{head}{self.fixed}{headers}\r\n".encode() + body)
        return status, answer

    async def exchange(self, data: bytes) -> tuple[int, bytes, bytes]:
        """Send some bytes, and read status, head and body of one answer; raises as `raw` does."""
        try:
            if self._reader is None or self._writer is None:
                self._reader, self._writer = await asyncio.open_connection("127.0.0.1", self.port)
            self._writer.write(data)
            top = (await self._reader.readuntil(b"\r\n\r\n")).lower()
            length = next(int(line[15:]) for line in top.split(b"\r\n") if line[:15] == b"content-length:")
            body = await self._reader.readexactly(length)
            if b"connection: close" in top:
                self.drop()
            return int(top[9:12]), top, body
        except BaseException:
            self.drop()
            raise

    async def json(
        self, method: str, path: str, body: Any = None, headers: Mapping[str, str] | None = None
    ) -> tuple[int, Any]:
        """Send and read JSON."""
        more = "".join(f"{name}: {value}\r\n" for name, value in (headers or {}).items())
        content = b"" if body is None else json.dumps(body).encode()
        status, answer = await self.raw(method, path, content, f"Content-Type: application/json\r\n{more}")
        return status, json.loads(answer)
