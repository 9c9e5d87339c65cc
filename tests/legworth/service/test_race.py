"""Clients race for the last seats while the service is killed: what was acknowledged is what was sold.

A short race; ``python -m benchmarks.race_for_seats`` runs it as long as wanted.
"""

from __future__ import annotations

from pathlib import Path

from tests.legworth.service.race import run_race


def test_nothing_is_lost_or_oversold_when_the_service_is_killed(database: str, tmp_path: Path) -> None:
    found = run_race(tmp_path / "race", database, clients=50, seconds=4.0, kills=2)
    assert found.faults == []
    assert found.kills == 2
    assert found.happened["sale accepted"] > 50
    assert found.happened["sale refused"] > 50
    assert found.happened["cancellation accepted"] > 20
