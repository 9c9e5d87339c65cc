"""Planners' questions: the worth of a connection and of a change, held against solving anew."""

from __future__ import annotations

import json
import re
from pathlib import Path

import numpy as np
import pytest

from legworth.change import study_change
from legworth.change_account import account_of_change
from legworth.changed_network import changed_network, parse_changes
from legworth.connection import itineraries_between, itinerary_named, study_connection
from legworth.pricing import PricingOptions
from lp import LpOptions, Method, solve_network
from network import Network, SettingError, read_folder
from tests.commands import run
from tests.folders import Folder


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return Folder().write(tmp_path_factory.mktemp("network"))


@pytest.fixture(scope="module")
def network(folder: Path) -> Network:
    return read_folder(folder).network


@pytest.mark.parametrize("method", [Method.PROBABILISTIC, Method.DETERMINISTIC])
def test_party_lines_equal_solving_anew(network: Network, method: Method) -> None:
    options = PricingOptions(lp=LpOptions(method=method))
    position = itinerary_named(network, "NOR-SUD")
    (study,) = study_connection(network, [position], [1, 4, 9, 10], options)
    present = solve_network(network, options.lp)
    assert study.legs == ("L1", "L2")
    assert [line.seats for line in study.parties] == [1, 4, 9]
    path = np.isin(network.legs.name, study.legs)
    for line in study.parties:
        anew = solve_network(network.with_remaining(network.remaining - line.seats * path), options.lp)
        assert line.displacement == pytest.approx(present.objective - anew.objective, abs=1e-6)
        assert line.least_fare == pytest.approx(line.displacement / line.seats)
        assert line.by_bid_price == pytest.approx(line.seats * present.bid_price[path].sum())
        assert line.displacement >= line.by_bid_price - 1e-6
    for line in study.classes:
        assert line.displacement == pytest.approx(sum(study.bid_prices))
        assert line.open == (line.contribution >= 0)


def test_the_displaced_account_for_the_money(network: Network) -> None:
    position = itinerary_named(network, "NOR-OST")
    (study,) = study_connection(network, [position], [8], PricingOptions())
    assert study.displaced_by == 8
    # The folder has fewer products than are listed at most, so the rows say it all, down to 0.005 passengers each.
    money = sum(row.fare * row.passengers for row in study.displaced)
    assert money == pytest.approx(study.parties[-1].displacement, abs=0.005 * network.fare.sum())
    assert {leg for row in study.displaced for leg in row.legs} <= {"L1", "L3"}


def test_a_change_equals_pricing_two_folders(network: Network, tmp_path: Path, folder: Path) -> None:
    changes = parse_changes(("L2=+6",), (), ("NOR-HUB/A=150",))
    larger = Folder().cell("legs.csv", 3, "capacity", "26").cell("fares.csv", 2, "fare", "150").write(tmp_path / "n")
    study = study_change(network, changed_network(network, changes), LpOptions())
    assert study.before == pytest.approx(solve_network(network).objective)
    assert study.after == pytest.approx(solve_network(read_folder(larger).network).objective)
    outcome = run("change", folder, "--becomes", larger, "--json")
    assert json.loads(outcome.out)["gain"] == pytest.approx(study.after - study.before)
    assert study.moves
    assert study.moves[0].leg in ("L1", "L2", "L3")


def test_a_cancelled_leg_takes_its_itineraries_and_frees_seats(network: Network) -> None:
    after = changed_network(network, parse_changes((), ("L2",), ()))
    assert "L2" not in after.legs.name
    assert {"HUB-SUD", "NOR-SUD"} == set(network.itinerary) - set(after.itinerary)
    study = study_change(network, after, LpOptions())
    assert study.lost_itineraries == 2
    assert study.after < study.before
    solution = solve_network(network)
    through = network.product_itinerary == itinerary_named(network, "NOR-SUD")
    assert dict(study.freed) == {"L1": pytest.approx(solution.sales[through].sum())}


def test_a_new_leg_is_compared_by_folder(network: Network, tmp_path: Path, folder: Path) -> None:
    more = Folder().add("legs.csv", "L6,NOR,HUB,2030-03-04T06:00+01:00,2030-03-04T07:30+01:00,20,0")
    more.add("itineraries.csv", "NOR-HUB-2,L6").add("fares.csv", "NOR-HUB-2,A,100")
    more.add("demand.csv", "NOR-HUB-2,A,5,2.5,")
    outcome = run("change", folder, "--becomes", more.write(tmp_path / "more"), "--json")
    study = json.loads(outcome.out)
    assert study["gain"] == pytest.approx(500.0, rel=0.01)
    assert study["moves"] == []


@pytest.mark.parametrize(
    ("seats", "cancel", "fares", "words"),
    [
        (("L2",), (), (), "LEG=+20"),
        (("L2=many",), (), (), "LEG=+20"),
        (("L2=1.5",), (), (), "LEG=+20"),
        (("L9=+1",), (), (), "no leg 'L9'"),
        (("L2=-10",), (), (), "9 seats left"),
        ((), ("L9",), (), "no leg 'L9'"),
        ((), (), ("NOR-SUD=5",), "ITINERARY/CLASS"),
        ((), (), ("NOR-SUD/A=-5",), "from 0 to"),
        ((), (), ("NOR-SUD/Z=5",), "not sold in class 'Z'"),
        ((), (), ("NOWHERE/A=5",), "no itinerary 'NOWHERE'"),
        (("L2=30",), (), (), "write L2=+30 for 30 more or L2=-30 for 30 fewer"),
        (("L2=+99981",), (), (), "L2 would have 100,001 seats"),
        (("L2=+" + "9" * 400,), (), (), "cannot be read"),
        (("L2=+1", "L2=+1"), (), (), "--seats names L2 more than once"),
        (("L2=+1",), ("L2",), (), "contradict each other"),
        ((), ("L2",), ("NOR-SUD/A=150",), "--fare of NOR-SUD and --cancel L2 contradict each other"),
        ((), (), ("NOR-SUD/A=150", "NOR-SUD/A=160"), "--fare names NOR-SUD/A more than once"),
        ((), (), ("NOR-SUD/A=nan",), "ITINERARY/CLASS=120"),
        ((), (), ("NOR-SUD/A=1e300",), "from 0 to 1,000,000,000"),
    ],
)
def test_changes_that_make_no_sense_are_refused(
    network: Network, seats: tuple[str, ...], cancel: tuple[str, ...], fares: tuple[str, ...], words: str
) -> None:
    with pytest.raises(SettingError, match=re.escape(words)):
        changed_network(network, parse_changes(seats, cancel, fares))


def test_city_pairs_and_names_are_found_or_refused(network: Network) -> None:
    assert [network.itinerary[i] for i in itineraries_between(network, "NOR", "OST")] == ["NOR-OST"]
    with pytest.raises(SettingError, match="no station"):
        itineraries_between(network, "NOR", "XXX")
    with pytest.raises(SettingError, match="nothing is sold"):
        itineraries_between(network, "OST", "SUD")
    with pytest.raises(SettingError, match="no itinerary"):
        itinerary_named(network, "NOR-NOWHERE")
    with pytest.raises(SettingError, match="one program"):
        study_connection(network, [0], [1], PricingOptions(lp=LpOptions(method=Method.RANDOMISED)))


def test_commands_print_and_draw(folder: Path, tmp_path: Path) -> None:
    picture = tmp_path / "party.png"
    outcome = run("connection", folder, "--from", "NOR", "--to", "SUD", "--party", "4", "--picture", picture)
    assert outcome.code == 0
    assert "NOR-SUD: L1" in outcome.out
    assert "Least acceptable fare by party" in outcome.out
    assert picture.read_bytes().startswith(b"\x89PNG")
    outcome = run("change", folder, "--seats", "L1=+10", "--seats", "L2=+10")
    assert outcome.code == 0
    assert "Optimum of the probabilistic program before" in outcome.out
    assert run("connection", folder).code == 2
    assert run("connection", folder, "--itinerary", "NOR-SUD", "--from", "NOR").code == 2
    assert run("change", folder).code == 2


def test_seats_of_an_oversold_leg_are_filled_up_first(tmp_path: Path) -> None:
    oversold = read_folder(Folder().cell("legs.csv", 3, "sold", "30").write(tmp_path / "n")).network
    leg = int(np.flatnonzero(oversold.legs.name == "L2")[0])
    for more, remaining in ((5, 0), (10, 0), (13, 3)):
        assert changed_network(oversold, parse_changes((f"L2=+{more}",), (), ())).remaining[leg] == remaining


def test_changes_that_cannot_be_compared_are_refused(tmp_path: Path, network: Network, folder: Path) -> None:
    dollars = Folder().replace("network.toml", '"EUR"', '"USD"').write(tmp_path / "dollars")
    assert "one currency" in run("change", folder, "--becomes", dollars).err
    assert "one program" in run("change", folder, "--seats", "L1=+1", "--method", "randomised").err
    departed = Folder().replace("network.toml", "2030-02-25T02:30", "2030-03-01T07:00").write(tmp_path / "departed")
    assert "L1 has departed" in run("change", departed, "--seats", "L1=+1").err
    assert "L1 has departed" in run("change", departed, "--cancel", "L1").err


def test_what_was_changed_is_said(folder: Path) -> None:
    arguments = ("change", folder, "--seats", "L3=-2", "--cancel", "L2", "--fare", "OST-NOR/B=90")
    text = run(*arguments).out
    assert "L3: 16 -> 14 seats, 8 -> 6 left to sell" in text
    assert "L2: cancelled, 11 seats are sold on it" in text
    assert "OST-NOR B: fare 95.00 -> 90.00 EUR" in text
    assert "2 itineraries are no longer sold" in text
    changes = json.loads(run(*arguments, "--json").out)["changes"]
    assert changes["seats"] == [{"leg": "L3", "seats_before": 16, "seats_after": 14, "left_before": 8, "left_after": 6}]
    assert changes["cancelled"] == [{"leg": "L2", "seats": 20, "sold": 11}]
    assert changes["fares"] == [{"itinerary": "OST-NOR", "fare_class": "B", "fare_before": 95.0, "fare_after": 90.0}]
    assert changes["itineraries_lost"] == 2
    assert not any(changes[name] for name in ("added", "products_lost", "products_with_other_demand"))


def test_two_folders_are_compared_name_by_name(folder: Path, tmp_path: Path, network: Network) -> None:
    other = Folder().add("legs.csv", "L6,NOR,HUB,2030-03-04T06:00+01:00,2030-03-04T07:30+01:00,20,5")
    other.add("itineraries.csv", "NEW,L6").add("fares.csv", "NEW,A,100", "OST-NOR,C,50")
    other.add("demand.csv", "NEW,A,5,2.5,", "OST-NOR,C,1,1,").cell("demand.csv", 3, "mean", "4.5")
    other.cell("legs.csv", 6, "departs", "2030-03-03T17:30+01:00").cell("legs.csv", 2, "sold", "13")
    other.replace("fares.csv", "SUD-HUB,B,65\n", "").replace("demand.csv", "SUD-HUB,B,3,2,\n", "")
    for file in ("legs.csv", "itineraries.csv", "fares.csv", "demand.csv"):
        other.frame(file, lambda frame: frame.sample(frac=1.0, random_state=8))
    found = account_of_change(network, read_folder(other.write(tmp_path / "other")).network)
    assert [(move.leg, move.left_before, move.left_after) for move in found.seats] == [("L1", 12, 11)]
    assert [(leg.leg, leg.seats, leg.left) for leg in found.added] == [("L6", 20, 15)]
    assert (found.cancelled, found.fares) == ((), ())
    assert (found.legs_at_other_times, found.itineraries_lost, found.itineraries_added) == (1, 0, 1)
    assert (found.itineraries_rerouted, found.products_lost, found.products_added) == (0, 1, 1)
    assert found.products_with_other_demand == 1
    rerouted = Folder().replace("itineraries.csv", "NOR-OST,L1 L3", "NOR-OST,L1").write(tmp_path / "rerouted")
    assert account_of_change(network, read_folder(rerouted).network).itineraries_rerouted == 1


def test_the_same_network_in_another_order_is_no_change(folder: Path, tmp_path: Path, network: Network) -> None:
    shuffled = Folder()
    for file in ("stations.csv", "legs.csv", "itineraries.csv", "fares.csv", "demand.csv"):
        shuffled.frame(file, lambda frame: frame.sample(frac=1.0, random_state=3))
    path = shuffled.write(tmp_path / "shuffled")
    assert account_of_change(network, read_folder(path).network).is_empty
    assert "Nothing that is priced is changed." in run("change", folder, "--becomes", path).out


def test_of_many_changes_the_first_are_listed(folder: Path, tmp_path: Path) -> None:
    dearer = Folder().frame("fares.csv", lambda frame: frame.assign(fare=frame["fare"].astype(float) + 1))
    outcome = run("change", folder, "--becomes", dearer.write(tmp_path / "dearer"))
    assert outcome.out.count(": fare ") == 10
    assert "and 7 more products with other fares" in outcome.out
