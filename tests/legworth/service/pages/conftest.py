"""A store with two hostile nights, and the application that shows it."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest

from legworth.service.settings import ServiceSettings
from legworth.store import Store
from tests.legworth.refresh.nights import limits, make
from tests.legworth.service.pages.hostile_night import Browser, hostile, opened


@pytest.fixture(scope="session")
def hostile_store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A store with two nights of the hostile folder; not to be written."""
    path = tmp_path_factory.mktemp("pages")
    for seed in (2, 3):
        folder = limits(hostile(seed), demand_total=1.0, demand_share=1.0, price_share=1.0)
        if seed == 3:
            folder.replace("network.toml", "2030-02-25T", "2030-02-26T")
        make(folder.write(path / f"folder{seed}"), path / "store")
    return path / "store"


@pytest.fixture(scope="module")
def store(hostile_store: Path, tmp_path_factory: pytest.TempPathFactory) -> Store:
    """A copy of that store for the tests of one page."""
    path = tmp_path_factory.mktemp("page") / "store"
    shutil.copytree(hostile_store, path)
    return Store.open(path)


@pytest.fixture(scope="module")
def browser(store: Store) -> Iterator[Browser]:
    """A client of the application on that copy."""
    yield from opened(store, ServiceSettings())
