"""Folders damaged at random end in a certified price or in a list of faults, and never in anything else."""

from __future__ import annotations

import io
import json
import math
import random
from pathlib import Path

import pandas as pd
import pytest

from legworth.results import result_schemas
from tests.commands import run
from tests.folders import TABLES, Folder
from tests.legworth.damage import damage, in_bytes

SEEDS = range(220)


@pytest.mark.parametrize("seed", SEEDS)
def test_damage_ends_in_a_price_or_in_faults(seed: int, tmp_path: Path) -> None:
    folder, out = damage(seed).write(tmp_path / "folder"), tmp_path / "out"
    outcome = run("price", folder, "--out", out, "--json")
    document = json.loads(outcome.out)
    assert outcome.err == ""
    if outcome.code == 0:
        assert document["certified"] is True
        assert math.isfinite(document["objective"])
        assert (out / "bid_prices.csv").exists()
        for path in out.glob("*.csv"):
            frame = pd.read_csv(path, dtype=str, keep_default_na=False)
            for column in result_schemas()[path.stem]:
                if column.numeric:
                    assert all(math.isfinite(float(value)) for value in frame[column.name])
        return
    assert outcome.code == 2
    assert document["faults"]
    assert not out.exists()
    for fault in document["faults"]:
        assert "; " in fault["problem"] or fault["count"] > 1
        if fault["line"]:
            lines = (folder / fault["file"]).read_bytes().replace(b"\r\n", b"\n").replace(b"\r", b"\n").count(b"\n") + 1
            assert 1 <= fault["line"] <= lines


def test_damage_leaves_some_folders_sound(tmp_path: Path) -> None:
    """Were all of them refused, or none, the test above would be idle."""
    codes = [run("check", damage(seed).write(tmp_path / str(seed))).code for seed in SEEDS[:60]]
    assert {0, 2} == set(codes)
    assert 10 < codes.count(0) < 50


@pytest.mark.parametrize("seed", range(60))
def test_damaged_parquet_is_read_or_refused(seed: int, tmp_path: Path) -> None:
    rng, folder = random.Random(seed), Folder()
    table, content = rng.choice(TABLES), io.BytesIO()
    folder.table(f"{table}.csv").to_parquet(content, index=False)
    damaged = content.getvalue()
    for _ in range(rng.choice([1, 1, 3])):
        damaged = in_bytes(damaged, rng)
    path = folder.drop(f"{table}.csv").put(f"{table}.parquet", damaged).write(tmp_path)
    outcome = run("check", path, "--json")
    assert outcome.code in (0, 2)
    assert json.loads(outcome.out)["ok"] is (outcome.code == 0)
