"""The commands of docs/whole_chain.md, run as they stand there, end in certified bid prices for every leg."""

from __future__ import annotations

import json
import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

from network import read_folder

ROOT = Path(__file__).parents[2]
TEXT = (ROOT / "docs" / "whole_chain.md").read_text(encoding="utf-8")


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Run every command of the first block in an empty folder that holds the data where a clone has it."""
    folder = tmp_path_factory.mktemp("chain")
    (folder / "tests").symlink_to(ROOT / "tests")
    block = re.search(r"^```sh\n(.*?)^```", TEXT, flags=re.MULTILINE | re.DOTALL)
    assert block is not None
    commands = [shlex.split(line) for line in block[1].replace("\\\n", " ").splitlines()]
    assert len(commands) == 5
    for command in commands:
        program = {"python": [sys.executable], "legworth": [sys.executable, "-m", "legworth.cli"]}[command[0]]
        path = os.pathsep.join([str(ROOT), os.environ.get("PYTHONPATH", "")])
        run = subprocess.run(
            [*program, *command[1:]],
            cwd=folder,
            env=os.environ | {"PYTHONPATH": path},
            capture_output=True,
            text=True,
            check=False,
        )
        assert run.returncode == 0, (command, run.stderr)
    return folder


def test_schedule_and_connections_are_those_of_the_real_day(done: Path) -> None:
    # 181 departures and 189 arrivals at 57 airports, counted in the reported flights.
    read = read_folder(done / "hub_day")
    network = read.network
    assert read.warnings == ()
    assert (network.n_legs, len(network.stations)) == (370, 58)
    legs = (network.path_start[1:] - network.path_start[:-1]).tolist()
    assert (legs.count(1), legs.count(2), len(legs)) == (370, 2950, 3320)
    assert f"{len(legs):,} itineraries" in TEXT


def test_every_price_is_certified_and_the_figures_are_those_of_the_document(done: Path) -> None:
    summary = json.loads((done / "hub_priced" / "summary.json").read_text())
    assert summary["certified"] is True
    prices = pd.read_csv(done / "hub_priced" / "bid_prices.csv")
    assert len(prices) == 370
    assert prices["bid_price"].ge(0).all()
    assert f"{summary['objective']:,.0f}" in TEXT
    assert f"{summary['bounds']['revenue']:,.0f}" in TEXT
    assert f"{prices['bid_price'].mean():.2f}" in TEXT
