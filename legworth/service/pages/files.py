"""Style sheets and scripts, served from here; their addresses carry a digest, so that they may be kept for long."""

from __future__ import annotations

from functools import cache
from hashlib import sha256
from pathlib import Path

from starlette.responses import Response
from starlette.staticfiles import StaticFiles
from starlette.types import Scope

__all__ = ["PageFiles", "file_address"]

FOLDER = Path(__file__).with_name("static")


@cache
def file_address(name: str) -> str:
    """Address of a file, which changes with its content."""
    return f"/static/{name}?v={sha256((FOLDER / name).read_bytes()).hexdigest()[:12]}"


class PageFiles(StaticFiles):
    """The files of the pages."""

    def __init__(self) -> None:
        super().__init__(directory=FOLDER)

    async def get_response(self, path: str, scope: Scope) -> Response:
        """Answer with a file that browsers keep and take for what it says it is."""
        response = await super().get_response(path, scope)
        response.headers["X-Content-Type-Options"] = "nosniff"
        response.headers["Cross-Origin-Resource-Policy"] = "same-origin"
        kept = "public, max-age=31536000, immutable" if b"v=" in scope["query_string"] else "no-cache"
        response.headers["Cache-Control"] = kept
        return response
