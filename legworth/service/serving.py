"""The service as a process: uvicorn on one address, until stopped."""

from __future__ import annotations

import logging
import socket
import sys
from collections.abc import Callable
from datetime import datetime
from pathlib import Path
from typing import Any

import structlog
import uvicorn

from legworth.service.app import make_app
from legworth.service.connections import BoundedConnection
from legworth.service.ledger import Ledger
from legworth.service.settings import ServiceSettings, read_service_settings
from legworth.service.state import ServiceState
from legworth.store import Store
from network import SettingError

__all__ = ["log_in_lines", "run_service"]

BACKLOG = 2_048
"""Connections that may wait to be taken."""


def run_service(
    store: Path, host: str, port: int, settings: Path | None, at: str | None = None, forward: bool = False
) -> None:
    """Serve the night in force of a store, after bringing its ledger forward if that is wanted.

    Raises
    ------
    SettingError
        If the store is none, a setting is wrong, or the address cannot be listened on.
    LedgerError
        If the ledger cannot be opened or brought forward.
    """
    log_in_lines()
    opened = Store.open(store)
    chosen = read_service_settings(settings)
    listening = _listen(host, port)
    with listening:
        if forward:
            before, now = Ledger.bring_forward(chosen.ledger_url(opened.path))
            structlog.get_logger().info("ledger brought forward", version_before=before, version=now)
        state = ServiceState.start(opened, chosen, _instant(opened, at))
        app = make_app(opened, chosen, state=state)
        server = uvicorn.Server(_config(app, chosen))
        address, bound = listening.getsockname()[:2]
        shown = f"[{address}]" if ":" in address else address
        structlog.get_logger().info("listening", url=f"http://{shown}:{bound}")
        server.run(sockets=[listening])


def _config(app: Any, settings: ServiceSettings) -> uvicorn.Config:
    return uvicorn.Config(
        app,
        http=BoundedConnection,
        ws="none",
        access_log=False,
        log_config=None,
        server_header=False,
        proxy_headers=bool(settings.trusted_proxies),
        forwarded_allow_ips=settings.trusted_proxies,
        timeout_graceful_shutdown=10,
    )


def _listen(host: str, port: int) -> socket.socket:
    """Take the address, so that nothing else is done if it cannot be had."""
    try:
        family, kind, protocol, _, address = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)[0]
        taken = socket.socket(family, kind, protocol)
        try:
            taken.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            taken.bind(address)
            taken.listen(BACKLOG)
        except OSError:
            taken.close()
            raise
    except OSError as error:
        raise SettingError(f"cannot listen on {host} port {port} ({error.strerror}); choose another") from error
    return taken


def log_in_lines() -> None:
    """Log one line of JSON an event to standard error, those of libraries too; no variables, no bodies."""
    shared: list[Callable[..., Any]] = [
        structlog.processors.add_log_level,
        structlog.processors.TimeStamper(fmt="iso"),
        structlog.processors.ExceptionRenderer(structlog.tracebacks.ExceptionDictTransformer(show_locals=False)),
    ]
    structlog.configure(
        processors=[*shared, structlog.processors.JSONRenderer()],
        logger_factory=structlog.PrintLoggerFactory(sys.stderr),
    )
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(
        structlog.stdlib.ProcessorFormatter(
            foreign_pre_chain=shared,
            processors=[
                structlog.stdlib.ProcessorFormatter.remove_processors_meta,
                structlog.processors.JSONRenderer(),
            ],
        )
    )
    logging.basicConfig(handlers=[handler], level=logging.ERROR, force=True)


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
