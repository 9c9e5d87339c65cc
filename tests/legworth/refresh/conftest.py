"""One cluster for all tests of the refresh that need any."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from tests.legworth.refresh.clusters import cluster


@pytest.fixture(scope="session")
def two_workers(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """Scheduler file of a cluster of two workers, which are replaced when they end."""
    with cluster(tmp_path_factory.mktemp("cluster"), 2, nanny=True) as started:
        yield started.file
