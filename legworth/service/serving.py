"""The service as a process: uvicorn on one address, until stopped."""

from __future__ import annotations

import sys
from datetime import datetime
from pathlib import Path

import structlog
import uvicorn

from legworth.service.app import make_app
from legworth.service.settings import read_service_settings
from legworth.store import Store
from network import SettingError

__all__ = ["run_service"]


def run_service(store: Path, host: str, port: int, settings: Path | None, at: str | None = None) -> None:
    """Serve the night in force of a store.

    Raises
    ------
    SettingError
        If the store is none, or a setting is wrong.
    """
    structlog.configure(
        processors=[
            structlog.processors.add_log_level,
            structlog.processors.TimeStamper(fmt="iso"),
            structlog.processors.ExceptionRenderer(structlog.tracebacks.ExceptionDictTransformer(show_locals=False)),
            structlog.processors.JSONRenderer(),
        ],
        logger_factory=structlog.PrintLoggerFactory(sys.stderr),
    )
    opened = Store.open(store)
    app = make_app(opened, read_service_settings(settings), _instant(opened, at))
    uvicorn.run(app, host=host, port=port, access_log=False, log_level="warning", timeout_graceful_shutdown=10)


def _instant(store: Store, at: str | None) -> datetime | None:
    """Instant that the clock begins at: as given, or that of the snapshot in force."""
    if at is None:
        return None
    if at == "snapshot":
        night = store.in_force()
        return None if night is None else night.manifest.as_of
    try:
        instant = datetime.fromisoformat(at)
    except ValueError as error:
        raise SettingError(f"{at!r} is neither snapshot nor a date and time; write 2027-03-01T06:40+01:00") from error
    if instant.tzinfo is None:
        raise SettingError(f"{at!r} has no offset from UTC; write 2027-03-01T06:40+01:00")
    return instant
