"""Settings of the control service, declared once with limits and meaning, and read from one TOML file."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from legworth.service.wording import fault_words
from network import SettingError

__all__ = ["ServiceSettings", "read_service_settings"]


class ServiceSettings(BaseModel):
    """The whole of the service's settings file; every setting has a default."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)

    database: Annotated[
        str | None,
        Field(description="SQLAlchemy URL of the ledger, SQLite or PostgreSQL; without it, seats.sqlite in the store."),
    ] = None
    read_needs_token: Annotated[
        bool, Field(description="Whether questions, look-ups, metrics and pages need a token too.")
    ] = False
    body_limit: Annotated[
        int, Field(ge=1_000, le=100_000_000, description="Greatest body of a request; larger ones stay unread, bytes.")
    ] = 1_000_000
    batch_limit: Annotated[int, Field(ge=1, le=100_000, description="Most requests in one batch.")] = 10_000
    rate_limit: Annotated[
        float,
        Field(
            ge=0,
            allow_inf_nan=False,
            description="Requests that one client address may send, per second; 0 for no limit.",
        ),
    ] = 0.0
    burst: Annotated[
        int, Field(ge=1, description="Requests that one client may send at once before the rate limit counts.")
    ] = 1_000
    trusted_proxies: Annotated[
        list[str],
        Field(description="Addresses of proxies whose X-Forwarded-For names the client; nobody else's is believed."),
    ] = []
    waiting_limit: Annotated[
        int,
        Field(ge=1, le=1_000_000, description="Sales and cancellations that may wait; further ones are turned away."),
    ] = 10_000
    parts_in_memory: Annotated[
        int, Field(ge=1, le=10_000, description="Parts of the night kept in memory, the latest used.")
    ] = 60
    follow_seconds: Annotated[
        float,
        Field(
            gt=0,
            le=3600,
            description="How often the store is looked at for a new night, and the ledger for orders that other "
            "services carried out, seconds.",
        ),
    ] = 1.0

    def ledger_url(self, store: Path) -> str:
        """SQLAlchemy URL of the ledger of a store."""
        return self.database or f"sqlite:///{store.resolve() / 'seats.sqlite'}"


def read_service_settings(path: Path | None) -> ServiceSettings:
    """Read the settings file; the defaults if there is none.

    Raises
    ------
    SettingError
        If the file cannot be read, or a setting is unknown or outside its limits.
    """
    if path is None:
        return ServiceSettings()
    try:
        return ServiceSettings.model_validate(tomllib.loads(path.read_text(encoding="utf-8")))
    except OSError as error:
        raise SettingError(f"{path}: cannot be read ({error.strerror}); name a file of settings") from error
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise SettingError(f"{path}: cannot be read as TOML ({error}); correct it") from error
    except ValidationError as problems:
        names = list(ServiceSettings.model_fields)
        lines = [
            f"{path}: {'.'.join(map(str, each['loc']))}: {fault_words(each, names, 'setting')}"
            for each in problems.errors()
        ]
        raise SettingError("\n".join(lines)) from problems
