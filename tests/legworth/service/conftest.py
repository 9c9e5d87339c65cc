"""Databases for the ledger: a SQLite file, and a real PostgreSQL of this run's own."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from itertools import count
from pathlib import Path

import psycopg
import pytest

from tests.legworth.service.postgres import postgres_programs, running_postgres
from tests.legworth.service.stores import HUB, publish

NUMBERS = count()


@pytest.fixture(scope="session")
def postgres_server() -> Iterator[str]:
    """A PostgreSQL server on loopback with durable writes; yields its address."""
    programs = postgres_programs()
    if programs is None:
        if os.environ.get("CI"):
            pytest.fail("PostgreSQL is not installed; CI must install Debian's package postgresql")
        pytest.skip("PostgreSQL is not installed")
    with running_postgres(programs) as address:
        yield address


@pytest.fixture(params=["sqlite", "postgresql"])
def database(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """URL of an empty database of either kind."""
    if request.param == "sqlite":
        return f"sqlite:///{tmp_path / 'seats.sqlite'}"
    server = request.getfixturevalue("postgres_server")
    name = f"seats_{next(NUMBERS)}"
    with psycopg.connect(server.replace("+psycopg", "") + "/postgres", autocommit=True) as connection:
        connection.execute(f'CREATE DATABASE "{name}"')  # type: ignore[arg-type]
    return f"{server}/{name}"


@pytest.fixture(scope="session")
def published_hub(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A store with one night of a small hub; not to be written."""
    folder = tmp_path_factory.mktemp("hub")
    publish(folder / "network", folder / "store", **HUB)
    return folder / "store"


@pytest.fixture
def store(published_hub: Path, tmp_path: Path) -> Path:
    """A store of the test's own with one night of a small hub."""
    shutil.copytree(published_hub, tmp_path / "store")
    return tmp_path / "store"
