"""HTTP connections with a bounded head, whose unreadable requests are answered in the service's shape of errors."""

from __future__ import annotations

from http import HTTPStatus

from uvicorn.protocols.http.httptools_impl import HttpToolsProtocol

from legworth.service.problems import PROBLEM_TYPE, problem_body

__all__ = ["BoundedConnection"]

HEAD_LIMIT = 32_768
"""Bytes of request line and headers."""


class BoundedConnection(HttpToolsProtocol):
    """A connection whose requests are refused as soon as their head is too long or cannot be read."""

    _head = 0
    _status = 400

    def on_message_begin(self) -> None:
        """Begin to count."""
        self._head = 0
        super().on_message_begin()

    def on_url(self, url: bytes) -> None:
        """Count a piece of the request line."""
        self._count(len(url), HTTPStatus.REQUEST_URI_TOO_LONG)
        super().on_url(url)

    def on_header(self, name: bytes, value: bytes) -> None:
        """Count a header."""
        self._count(len(name) + len(value) + 4, HTTPStatus.REQUEST_HEADER_FIELDS_TOO_LARGE)
        super().on_header(name, value)

    def _count(self, length: int, status: HTTPStatus) -> None:
        self._head += length
        if self._head > HEAD_LIMIT:
            self._status = status
            # The parser turns any error of this method into its own, and ends the connection by the method below.
            raise ValueError("the head is too long")

    def send_400_response(self, msg: str) -> None:
        """Answer a request that cannot be read, and end the connection."""
        status = HTTPStatus(self._status)
        detail = "this is no readable HTTP/1.1 request; correct its head"
        if status != HTTPStatus.BAD_REQUEST:
            detail = f"request line and headers are longer than {HEAD_LIMIT:,} bytes; send less"
        body = problem_body(status, detail)
        head = f"HTTP/1.1 {status.value} {status.phrase}\r\nContent-Type: {PROBLEM_TYPE}\r\n"
        head += f"Content-Length: {len(body)}\r\nConnection: close\r\n\r\n"
        self.transport.write(head.encode() + body)
        self.transport.close()
