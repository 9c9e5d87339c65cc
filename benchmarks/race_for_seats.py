"""Clients race for the last seats while the service is killed again and again.

``python -m benchmarks.race_for_seats [--seconds 60] [--kills 10] [--clients 50] [--database URL]``

Prints what happened and every fault that the history checker of the tests finds between what was acknowledged and what
the ledger holds; exits with 1 if there is any. Without a URL the ledger is the store's SQLite file; a PostgreSQL
database must be empty.
"""

from __future__ import annotations

import json
import sys
import tempfile
from pathlib import Path

import click

from tests.legworth.service.race import run_race


@click.command()
@click.option("--seconds", default=60.0, show_default=True)
@click.option("--kills", default=10, show_default=True)
@click.option("--clients", default=50, show_default=True)
@click.option("--database", help="URL of an empty database, such as postgresql+psycopg://user@127.0.0.1/seats.")
@click.option("--seed", default=1, show_default=True)
def main(seconds: float, kills: int, clients: int, database: str | None, seed: int) -> None:
    """Run the race and check its history."""
    with tempfile.TemporaryDirectory() as scratch:
        found = run_race(Path(scratch) / "race", database, clients=clients, seconds=seconds, kills=kills, number=seed)
    happened = {"seconds": round(found.seconds, 1), "kills": found.kills, **dict(sorted(found.happened.items()))}
    click.echo(json.dumps({**happened, "faults": found.faults}, indent=2))
    sys.exit(1 if found.faults else 0)


if __name__ == "__main__":
    main()
