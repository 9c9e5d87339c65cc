"""Clients race for the last seats while the service is killed again and again.

``python -m benchmarks.race_for_seats [--seconds 60] [--kills 10] [--clients 50] [--database sqlite|postgresql|URL]``

Prints what happened and every fault that the history checker of the tests finds between what was acknowledged and what
the ledger holds; exits with 1 if there is any. ``sqlite`` is a file in the store, ``postgresql`` a server that is
started for the run (Debian's package postgresql); a database named by its URL must be empty.
"""

from __future__ import annotations

import json
import sys
import tempfile
from contextlib import ExitStack
from pathlib import Path

import click

from tests.legworth.service.postgres import postgres_programs, running_postgres
from tests.legworth.service.race import run_race


@click.command()
@click.option("--seconds", default=60.0, show_default=True)
@click.option("--kills", default=10, show_default=True)
@click.option("--clients", default=50, show_default=True)
@click.option("--database", default="sqlite", show_default=True, help="sqlite, postgresql, or the URL of an empty one.")
@click.option("--seed", default=1, show_default=True)
def main(seconds: float, kills: int, clients: int, database: str, seed: int) -> None:
    """Run the race and check its history."""
    with ExitStack() as things:
        scratch = Path(things.enter_context(tempfile.TemporaryDirectory()))
        url: str | None = database
        if database == "sqlite":
            url = None
        elif database == "postgresql":
            programs = postgres_programs()
            if programs is None:
                raise click.ClickException("PostgreSQL is not installed")
            url = f"{things.enter_context(running_postgres(programs))}/postgres"
        found = run_race(scratch / "race", url, clients=clients, seconds=seconds, kills=kills, number=seed)
    happened = {"seconds": round(found.seconds, 1), "kills": found.kills, **dict(sorted(found.happened.items()))}
    click.echo(json.dumps({**happened, "faults": found.faults}, indent=2))
    sys.exit(1 if found.faults else 0)


if __name__ == "__main__":
    main()
