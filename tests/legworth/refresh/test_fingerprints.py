"""Fingerprints move with what decides the results, and with nothing else."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from heuristics import LegControl
from legworth.curves import CurveMethod
from legworth.pricing import PricingOptions
from legworth.refresh import cut_parts
from legworth.refresh.fingerprints import MODULES, part_fingerprints
from lp import LpOptions, Method, SolverOptions
from network import read_folder
from tests.folders import Folder
from tests.legworth.refresh.nights import PRICING

ROOT = Path(__file__).parents[3]
FIRST, LAST = "2030-03-01", "2030-03-03"


def moved(change: Callable[[Folder], Folder], part: str, where: Path) -> set[str]:
    """Fingerprints of a part that a change of the folder moves."""
    found = []
    for n, folder in enumerate((Folder(), change(Folder()))):
        network = read_folder(folder.write(where / str(n))).network
        own = next(p for p in cut_parts(network) if p.name == part).network_of(network)
        found.append(part_fingerprints(own, PRICING, "auto").as_dict())
    return {name for name in found[0] if found[0][name] != found[1][name]}


def as_of(instant: str) -> Callable[[Folder], Folder]:
    return lambda folder: folder.replace("network.toml", "2030-02-25T02:30+01:00", instant)


CHANGES: dict[str, tuple[Callable[[Folder], Folder], set[str]]] = {
    "nothing": (lambda f: f, set()),
    "seats sold": (lambda f: f.cell("legs.csv", 2, "sold", "13"), {"prices", "curves", "tables"}),
    "capacity and seats sold alike": (
        lambda f: f.cell("legs.csv", 2, "sold", "13").cell("legs.csv", 2, "capacity", "25"),
        {"tables"},
    ),
    "a fare": (lambda f: f.cell("fares.csv", 2, "fare", "121"), {"prices", "curves", "tables"}),
    "a demand": (lambda f: f.cell("demand.csv", 2, "mean", "9.75"), {"prices", "curves", "tables"}),
    "a deviation": (lambda f: f.cell("demand.csv", 2, "deviation", "7"), {"prices", "curves", "tables"}),
    "a name of a leg": (
        lambda f: f.cell("legs.csv", 2, "leg", "L9").mutate("itineraries.csv", lambda t: t.replace("L1", "L9")),
        {"prices", "curves", "tables"},
    ),
    "a label": (lambda f: f.cell("stations.csv", 2, "name", "Hub"), {"tables"}),
    "a booking curve": (
        lambda f: f.replace("booking_curves.csv", "early,30,0.5", "early,30,0.6"),
        {"curves", "tables"},
    ),
    "another curve for a product": (lambda f: f.cell("demand.csv", 2, "curve", ""), {"curves", "tables"}),
    "an hour later": (as_of("2030-02-25T03:30+01:00"), {"curves"}),
    "after a departure": (as_of("2030-03-01T06:01+01:00"), {"prices", "curves"}),
    "the name of the network": (lambda f: f.replace("network.toml", "Tern Sound Ferries", "Skua Ferries"), set()),
    "another part": (lambda f: f.cell("legs.csv", 6, "sold", "4"), set()),
    "a check": (lambda f: f.add("network.toml", "[refresh]", "price_share = 0.5"), set()),
}


@pytest.mark.parametrize("name", CHANGES)
def test_a_change_moves_the_fingerprints_of_what_it_decides(name: str, tmp_path: Path) -> None:
    change, expected = CHANGES[name]
    assert moved(change, FIRST, tmp_path) == expected


def test_a_change_is_seen_by_its_own_part_alone(tmp_path: Path) -> None:
    assert moved(CHANGES["another part"][0], LAST, tmp_path) == {"prices", "curves", "tables"}


SETTINGS: dict[str, tuple[PricingOptions, set[str]]] = {
    "method": (replace(PRICING, lp=LpOptions(Method.DETERMINISTIC)), {"prices", "curves"}),
    "solver": (replace(PRICING, lp=LpOptions(solver=SolverOptions("highs"))), {"prices", "curves"}),
    "tail": (replace(PRICING, lp=LpOptions(tail=1e-5)), {"prices", "curves"}),
    "virtual classes": (replace(PRICING, legs=LegControl(virtual_classes=3)), {"prices", "curves"}),
    "curves": (replace(PRICING, curves=CurveMethod.FARE_SPLITS), {"curves"}),
    "time limit": (replace(PRICING, lp=LpOptions(solver=SolverOptions(time_limit=5))), set()),
    "processes": (replace(PRICING, jobs=4), set()),
    "seed that nothing draws by": (replace(PRICING, lp=LpOptions(seed=5)), set()),
}


@pytest.mark.parametrize("name", SETTINGS)
def test_settings_move_the_fingerprints_of_what_they_decide(name: str, tmp_path: Path) -> None:
    network = read_folder(Folder().write(tmp_path / "folder")).network
    options, expected = SETTINGS[name]
    before, after = (part_fingerprints(network, one, "auto").as_dict() for one in (PRICING, options))
    assert {key for key in before if before[key] != after[key]} == expected


def test_every_module_that_a_part_is_priced_by_is_in_the_fingerprint_of_the_code() -> None:
    code = "import sys, legworth.refresh.tasks; print(*(n for n in sys.modules if n.startswith('legworth')))"
    loaded = subprocess.run(
        [sys.executable, "-c", code],
        cwd=ROOT,
        check=True,
        capture_output=True,
        text=True,
    ).stdout.split()
    named = {f"legworth.{name.removesuffix('.py').replace('/', '.')}" for name in MODULES}
    assert named <= set(loaded)
    assert set(loaded) - named == {"legworth", "legworth.refresh"}
