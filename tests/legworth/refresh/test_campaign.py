"""A short campaign of the one that `benchmarks.refresh_faults` runs, and proof that its verdict can be a bad one.

The whole campaign, and what came of it, is described in ``docs/reliability.md``.
"""

from __future__ import annotations

import json
import random
import shutil
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from benchmarks.faults.campaign import Campaign
from benchmarks.faults.ground import BEFORE, FIRST, TONIGHT, Ground, Step, check_states
from benchmarks.faults.kills import kill_at_publication
from benchmarks.faults.trial import OLD, Trial, plain
from benchmarks.faults.watching import Reader, family
from benchmarks.refresh_faults import FAULTS

pytestmark = pytest.mark.skipif(not sys.platform.startswith("linux"), reason="processes are found by /proc")

Harm = Callable[[Path], None]


@pytest.fixture(scope="module")
def ground(tmp_path_factory: pytest.TempPathFactory) -> Ground:
    return Ground(tmp_path_factory.mktemp("ground"))


@pytest.fixture
def campaign(ground: Ground, tmp_path: Path) -> Campaign:
    found = Campaign(ground, tmp_path, seed=1)
    found.lengths.append(4.0)
    return found


def test_tonight_solves_two_parts_and_takes_two_over(ground: Ground, tmp_path: Path) -> None:
    check_states(ground, tmp_path / "folder")
    assert len({json.dumps(sorted(files)) for files in ground.states.values()}) == 1
    essences = [ground.expected((Step(FIRST), Step(BEFORE), Step(state))) for state in (BEFORE, TONIGHT)]
    assert essences[0].differences(essences[1])


def test_a_night_killed_at_its_publication_leaves_the_old_one_or_the_new_one(campaign: Campaign) -> None:
    kill_at_publication(campaign, 1, 2, random.Random(1))
    tally = campaign.tallies["kill-at-publication"]
    assert tally.violations == []
    assert (tally.tries, tally.old + tally.new, tally.next_succeeded) == (1, 1, 1)
    assert tally.nights_read >= 2
    assert family(campaign.ground.mark) == {}


def flipped(path: Path) -> None:
    data = bytearray(path.read_bytes())
    data[-1] ^= 1
    path.write_bytes(bytes(data))


def other_night(store: Path) -> None:
    (store / "in_force").write_text(json.dumps({"night": "00001-2027-02-25", "manifest": "0" * 64}))


def one_part(store: Path, name: str) -> Path:
    return sorted((store / "nights" / f"night={OLD}").glob(f"part=*/{name}"))[0]


def certificate_gone(store: Path) -> None:
    path = store / "nights" / f"night={OLD}" / "manifest.json"
    path.write_text(path.read_text().replace('"holds": true', '"holds": false', 1))


HARM: dict[str, tuple[Harm, str]] = {
    "a flipped bit": (lambda store: flipped(one_part(store, "bid_prices.parquet")), "is not what the manifest says"),
    "a lost file": (lambda store: one_part(store, "legs.parquet").unlink(), "cannot be read"),
    "a stranger": (lambda store: one_part(store, "legs.parquet").with_name("x").touch(), "is not in the manifest"),
    "a manifest of another": (certificate_gone, "the manifest is not the one published"),
    "another night": (other_night, "the manifest is not the one published"),
    "no night": (lambda store: (store / "in_force").unlink(), "nothing is in force"),
    "no folder": (lambda store: shutil.rmtree(store / "nights" / f"night={OLD}"), "is in force and not there"),
}


@pytest.mark.parametrize("name", HARM)
def test_the_verdict_and_the_reader_see_what_is_wrong(name: str, campaign: Campaign) -> None:
    harm, line = HARM[name]
    with campaign.trial("harmed", 1) as trial:
        harm(trial.store)
        trial.settle(2)
        assert any(line in violation for violation in campaign.tallies["harmed"].violations)
        reader = Reader(trial.store, lambda folder, manifest: [])
        reader.end()
        assert reader.violations or name == "a stranger"


def test_a_night_of_other_tables_is_a_violation(campaign: Campaign, ground: Ground) -> None:
    with campaign.trial("other", 1) as trial:
        ground.write(f"tonight but {'legs.csv'}", trial.folder)
        ground.make(trial.folder, trial.store)
        trial.settle(0)
        found = campaign.tallies["other"].violations
        assert found == ["other 1: night 00003-2027-02-27 is made from tonight but legs.csv"]


@pytest.mark.parametrize(
    ("leave", "line"),
    [
        (lambda trial: (trial.store / "aside" / "00003-2027-02-27").mkdir(), ""),
        (lambda trial: (trial.temporary / "x-pulp.mps").touch(), "temporary x-pulp.mps"),
        (lambda trial: (trial.store / "nights" / "x.new").touch(), "nights/x.new"),
        (lambda trial: (trial.folder / "legs.csv.other").touch(), "legs.csv.other in the network folder"),
    ],
    ids=["aside", "temporary", "in the store", "in the folder"],
)
def test_what_is_left_over_is_a_violation_if_the_next_night_does_not_clear_it(
    leave: Callable[[Trial], None], line: str, campaign: Campaign
) -> None:
    with campaign.trial("left", 1) as trial:
        leave(trial)
        trial.next_night()
        found = campaign.tallies["left"].violations
        assert any(line in violation for violation in found) == bool(line)


def test_every_fault_has_tries_and_a_title_of_its_own() -> None:
    assert len({fault.title for fault in FAULTS.values()}) == len(FAULTS)
    assert all(fault.tries(200) >= 10 for fault in FAULTS.values())


def test_messages_are_alike_whatever_paths_and_nights_they_name() -> None:
    first = plain("cannot write /a/b/00002-2027-02-26.jsonl (No space left on device); free space and try again\n")
    second = plain("cannot write /c/00003-2027-02-27.jsonl (No space left on device); free space and try again\n")
    assert first == second
