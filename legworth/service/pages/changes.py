"""Tonight against last night: from the report that the refresh wrote, and the health of the run."""

from __future__ import annotations

import asyncio

from fastapi import Request
from starlette.responses import HTMLResponse, Response

from legworth.refresh.checks import check_line
from legworth.service.errors import UnknownError
from legworth.service.pages.changes_file import read_changes
from legworth.service.pages.routes import page_router, planner_of

__all__ = ["pages"]

pages = page_router()
REPORT_POLICY = "default-src 'none'; style-src 'unsafe-inline'; img-src data:; base-uri 'none'; frame-ancestors 'none'"
"""The written report holds its style and pictures in itself, and needs no script."""


@pages.get("/changes")
async def changes(request: Request) -> Response:
    """What moved since last night."""
    planner = await planner_of(request)
    night = planner.night.night
    found = await asyncio.to_thread(read_changes, night)
    checks = [(check.passed, check_line(check)) for check in night.manifest.checks]
    manifest = night.manifest
    return await planner.page(
        "changes.html",
        manifest=manifest,
        checks=sorted(checks),
        certified=sum(part.certified for part in manifest.parts),
        taken_over=sum(part.taken_over_from is not None for part in manifest.parts),
        changes=found,
        written=(night.folder / "changes.html").exists(),
    )


@pages.get("/changes.html")
async def report(request: Request) -> Response:
    """The report as the refresh wrote it."""
    planner = await planner_of(request)
    try:
        data = await asyncio.to_thread((planner.night.night.folder / "changes.html").read_bytes)
    except OSError as error:
        raise UnknownError(f"night {planner.night.name} has no written report of changes") from error
    return HTMLResponse(data, headers={"Content-Security-Policy": REPORT_POLICY})
