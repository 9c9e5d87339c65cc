"""What moved between two nights: every figure against the tables themselves, computed here with pandas."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from legworth.refresh.changes import Changes, ChangesOptions, find_changes
from legworth.store import Check, Forced, Night, Store
from network import SettingError
from tests.folders import Folder
from tests.legworth.refresh.changes_cases import Extras, hub_folder, publish_folder

SOLD_IN1, SOLD_OUT2 = 2, 8
"""Lines of legs.csv: ``in1`` and ``out2``."""


@pytest.fixture
def store(tmp_path: Path) -> Store:
    return Store.open(tmp_path / "store", create=True)


def connections(night: Night) -> pd.DataFrame:
    frame = night.table("connections").to_pandas()
    return frame.astype({"itinerary": "str", "fare_class": "str", "disagreement": "str"}).set_index(
        ["itinerary", "fare_class"]
    )


def moved_nights(store: Store, place: Path) -> tuple[Night, Night]:
    """Two nights: thirteen seats sold on ``in1``, other demand and another fare; the second day stays as it was."""
    last = publish_folder(store, hub_folder(), place)
    other = hub_folder().cell("legs.csv", SOLD_IN1, "sold", "33")
    other = other.cell("demand.csv", 2, "mean", "6").cell("fares.csv", 9, "fare", "200")
    return last, publish_folder(store, other, place)


def test_price_moves_are_those_of_the_tables_by_money(store: Store, tmp_path: Path) -> None:
    last, tonight = moved_nights(store, tmp_path)
    found = find_changes(tonight, last).prices
    assert found is not None
    then, now = (night.table("bid_prices").to_pandas().set_index("leg") for night in (last, tonight))
    move = now["bid_price"] - then["bid_price"]
    money = move.abs() * np.maximum(now["remaining"], then["remaining"])
    expected = money[move.abs() > 1e-6 * 200].sort_values(ascending=False)
    assert [line.leg for line in found.moves] == [str(leg) for leg in expected.index]
    assert [line.money for line in found.moves] == pytest.approx(expected.tolist())
    assert (found.rose, found.fell, found.legs) == ((move > 1e-4).sum(), (move < -1e-4).sum(), 8)
    assert sum(date.up - date.down for date in found.dates) == pytest.approx(
        (np.sign(move) * money)[expected.index].sum()
    )
    assert {date.date: date.legs for date in found.dates} == {"2030-03-01": 4, "2030-03-02": 4}
    assert found.moves[0].leg == "in1"
    assert found.moves[0].sold == 13


def test_only_the_changed_part_is_compared_and_flips_are_those_of_the_tables(store: Store, tmp_path: Path) -> None:
    last, tonight = moved_nights(store, tmp_path)
    found = find_changes(tonight, last).products
    then, now = connections(last), connections(tonight)
    closed, opened = then["open"] & ~now["open"], ~then["open"] & now["open"]
    assert found.parts_compared == 1
    assert closed.sum() > 0
    for flips, totals, expected in (
        (found.closed, found.closed_totals, closed),
        (found.opened, found.opened_totals, opened),
    ):
        assert {(flip.itinerary, flip.fare_class) for flip in flips} == set(now.index[expected])
        assert totals.products == expected.sum()
        assert [flip.worth for flip in flips] == sorted((flip.worth for flip in flips), reverse=True)
        for flip in flips:
            key = (flip.itinerary, flip.fare_class)
            assert flip.contribution == now.loc[key, "contribution"]
            assert flip.contribution_then == then.loc[key, "contribution"]
    assert found.fares_changed == (then["fare"] != now["fare"]).sum() == 1


def test_passengers_of_a_flip_are_demand_within_the_seats_of_the_night_that_sold_it(
    store: Store, tmp_path: Path
) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    tonight = publish_folder(store, hub_folder().cell("legs.csv", SOLD_IN1, "sold", "40"), tmp_path)
    flips = {(flip.itinerary, flip.fare_class): flip for flip in find_changes(tonight, last).products.closed}
    flip = flips["in-1", "A"]
    assert (flip.seats, flip.seats_then, flip.passengers) == (0, 20, 3.5)
    assert flip.worth == pytest.approx(3.5 * abs(flip.contribution))


def test_disagreements_new_gone_and_standing(store: Store, tmp_path: Path) -> None:
    last, tonight = moved_nights(store, tmp_path)
    found = find_changes(tonight, last).products
    then, now = connections(last), connections(tonight)
    words = now["disagreement"].isin(["network_only", "leg_only"])
    words_then = then["disagreement"].isin(["network_only", "leg_only"])
    assert (words & words_then).any()
    assert found.new_totals[0] == (words & ~words_then).sum() > 0
    assert found.gone_totals[0] == (~words & words_then).sum() > 0
    assert found.new_totals[1] == pytest.approx(now["at_stake"][words & ~words_then].sum())
    assert found.tonight.at_stake == pytest.approx(now["at_stake"].sum())
    assert found.last is not None
    assert found.last.at_stake == pytest.approx(then["at_stake"].sum())
    assert [line.at_stake for line in found.disputes] == pytest.approx(
        now["at_stake"][words].sort_values(ascending=False).tolist()
    )
    for line in found.disputes:
        key = (line.itinerary, line.fare_class)
        alike = then.loc[key, "disagreement"] == now.loc[key, "disagreement"]
        assert line.status == ("stands" if alike else "new" if not words_then[key] else "turned")


def test_the_same_night_twice_moves_nothing(store: Store, tmp_path: Path) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    found = find_changes(publish_folder(store, hub_folder(), tmp_path), last)
    assert found.prices is not None
    assert found.departures is not None
    assert found.run is not None
    assert (found.prices.moves, found.prices.rose, found.prices.fell) == ((), 0, 0)
    assert found.products.parts_compared == 0
    assert found.products.closed == found.products.new_disputes == found.products.gone_disputes == ()
    assert all(line.status == "stands" for line in found.products.disputes)
    assert found.products.tonight == found.products.last
    assert found.revenue.change == 0
    assert (found.departures.added, found.departures.gone_count, found.departures.departed) == (0, 0, 0)
    assert (found.run.solved, found.run.taken_over, found.run.certified) == (0, 2, 2)


def test_the_first_night_compares_with_nothing(store: Store, tmp_path: Path) -> None:
    tonight = publish_folder(store, hub_folder(), tmp_path)
    found = find_changes(tonight, None)
    assert (found.last, found.prices, found.departures, found.products.last) == (None, None, None, None)
    assert found.products.tonight.at_stake == pytest.approx(connections(tonight)["at_stake"].sum())
    assert {line.status for line in found.products.disputes} == {""}
    assert found.revenue.tonight == pytest.approx(sum(part.objective or 0 for part in tonight.manifest.parts))


def only_day(folder: Folder, day: int) -> Folder:
    """Keep the departures of one day."""
    for table, column in (("legs", 0), ("itineraries", 0), ("fares", 0), ("demand", 0)):
        rows = folder.text(f"{table}.csv").splitlines()
        kept = [row for row in rows[1:] if row.split(",")[column].endswith(str(day))]
        folder.put(f"{table}.csv", "\n".join([rows[0], *kept]) + "\n")
    return folder


def test_departed_gone_and_added_departures_are_told_apart(store: Store, tmp_path: Path) -> None:
    both = publish_folder(store, hub_folder(), tmp_path)
    early = publish_folder(store, only_day(hub_folder(), 2), tmp_path)
    found = find_changes(early, both).departures
    assert found is not None
    assert (found.gone_count, found.gone_sold, found.departed, found.added) == (4, 80, 0, 0)
    assert {line.leg for line in found.gone} == {"in1", "back1", "out1", "far1"}
    later = only_day(hub_folder(), 2).replace("network.toml", "2030-02-25T02:30", "2030-03-02T02:30")
    found = find_changes(publish_folder(store, later, tmp_path), both).departures
    assert found is not None
    assert (found.gone_count, found.departed, found.departed_seats, found.departed_empty) == (0, 4, 160, 80)
    back = find_changes(both, early).departures
    assert back is not None
    assert (back.added, [(day.date, day.legs, day.seats) for day in back.added_dates]) == (4, [("2030-03-01", 4, 80)])


def test_departed_legs_listed_tonight_close_no_product(store: Store, tmp_path: Path) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    later = hub_folder().replace("network.toml", "2030-02-25T02:30", "2030-03-02T02:30")
    tonight = publish_folder(store, later, tmp_path)
    found = find_changes(tonight, last)
    assert (connections(last)["open"] & ~connections(tonight)["open"]).sum() > 0
    assert found.products.closed_totals.products == 0
    assert found.products.gone_totals[0] == 0
    assert found.departures is not None
    assert (found.departures.departed, found.departures.on_sale) == (4, 4)
    assert found.prices is not None
    assert found.prices.legs == 4


def test_other_times_and_sizes(store: Store, tmp_path: Path) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    other = hub_folder().cell("legs.csv", SOLD_OUT2, "capacity", "52")
    other = other.cell("legs.csv", 2, "departs", "2030-03-01T05:30+01:00")
    found = find_changes(publish_folder(store, other, tmp_path), last).departures
    assert found is not None
    assert [(line.leg, line.departs, line.departs_then) for line in found.retimed] == [
        ("in1", "2030-03-01 05:30", "2030-03-01 06:00")
    ]
    assert [(line.leg, line.capacity, line.capacity_then) for line in found.resized] == [("out2", 52, 40)]


def test_revenue_is_compared_part_by_part_where_departures_are_alike(store: Store, tmp_path: Path) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    fewer = hub_folder().cell("legs.csv", SOLD_OUT2, "sold", "30")
    fewer = fewer.line("itineraries.csv", 5, None).line("legs.csv", 5, None)
    for table in ("fares", "demand"):
        fewer.mutate(f"{table}.csv", lambda text: "".join(x for x in text.splitlines(True) if "far-1" not in x))
    fewer.mutate("itineraries.csv", lambda text: "".join(x for x in text.splitlines(True) if "far1" not in x))
    found = find_changes(publish_folder(store, fewer, tmp_path), last)
    revenue, objective = found.revenue, {part.name: part.objective for part in last.manifest.parts}
    assert (revenue.parts, revenue.departures, revenue.apart, revenue.seats_sold) == (1, 4, 1, 10)
    assert revenue.then == objective["2030-03-02"]
    assert revenue.now < revenue.then
    prices = last.table("bid_prices").to_pandas().set_index("leg")["bid_price"]
    assert revenue.sold_worth == pytest.approx(10 * prices["out2"])
    assert [line.part for line in revenue.most] == ["2030-03-02"]


def test_parts_tied_together_overnight_lose_no_product(store: Store, tmp_path: Path) -> None:
    """An itinerary over both days makes one part of two; its products are matched across the part names."""
    last = publish_folder(store, hub_folder(), tmp_path)
    tied = hub_folder().add("itineraries.csv", "in1+out2,in1 out2")
    tied.add("fares.csv", "in1+out2,A,350").add("demand.csv", "in1+out2,A,2,1.5")
    tonight = publish_folder(store, tied, tmp_path)
    assert len(tonight.parts()) == 1
    found = find_changes(tonight, last).products
    then, now = connections(last), connections(tonight)
    flips = (then["open"] != now["open"].reindex(then.index)).sum()
    assert (found.added, found.dropped) == (1, 0)
    assert found.closed_totals.products + found.opened_totals.products == flips
    assert all(line.status != "new product" or line.itinerary == "in1+out2" for line in found.disputes)


def test_lists_are_no_longer_than_asked_for_and_totals_stay_whole(store: Store, tmp_path: Path) -> None:
    last, tonight = moved_nights(store, tmp_path)
    whole, short = find_changes(tonight, last), find_changes(tonight, last, options=ChangesOptions(top=1))
    assert len(short.products.disputes) == len(short.products.closed) == 1
    assert short.products.closed[0] == whole.products.closed[0]
    assert short.products.closed_totals == whole.products.closed_totals
    assert short.prices is not None
    assert whole.prices is not None
    assert [move.leg for move in short.prices.moves] == [whole.prices.moves[0].leg]
    assert short.prices.rose == whole.prices.rose


def test_another_currency_is_not_compared(store: Store, tmp_path: Path) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    other = hub_folder().replace("network.toml", 'currency = "EUR"', 'currency = "CHF"')
    found = find_changes(publish_folder(store, other, tmp_path), last)
    assert (found.last, found.prices) == (None, None)
    assert "EUR" in found.note
    assert "CHF" in found.note


def test_other_settings_and_an_older_snapshot_are_said(store: Store, tmp_path: Path) -> None:
    last = publish_folder(store, hub_folder(), tmp_path)
    other = Extras(settings={"method": "probabilistic", "tail": 1e-4})
    assert "tail" in find_changes(publish_folder(store, hub_folder(), tmp_path, other), last).note
    earlier = hub_folder().replace("network.toml", "2030-02-25", "2030-02-24")
    assert "backwards" in find_changes(publish_folder(store, earlier, tmp_path), last).note


def test_health_of_a_forced_run(store: Store, tmp_path: Path) -> None:
    held = Check(name="zero", limit=0.95, found=0.1, passed=True)
    failed = Check(name="prices", limit=0.1, found=0.4, passed=False, look_at=("in1: 80 to 190",))
    extras = Extras(checks=(held, failed), forced=Forced(who="mara", reason="a fair begins"))
    run = find_changes(publish_folder(store, hub_folder(), tmp_path, extras), None).run
    assert run is not None
    assert run.failed == (failed,)
    assert run.checks[0] == failed
    assert run.forced is not None
    assert run.forced.who == "mara"
    assert (run.parts, run.solved, run.legs, run.products) == (2, 2, 8, 42)
    assert 0 <= run.greatest_gap <= 1e-7


def test_everything_stands_in_a_document_the_same_each_time(store: Store, tmp_path: Path) -> None:
    last, tonight = moved_nights(store, tmp_path)
    found: Changes = find_changes(tonight, last)
    assert find_changes(tonight, last) == found
    document = json.loads(json.dumps(found.as_dict(), allow_nan=False))
    assert document["tonight"]["as_of"] == "2030-02-25T02:30:00+01:00"
    assert found.prices is not None
    assert document["prices"]["moves"][0]["cause"]["how"] == "part"
    assert document["prices"]["moves"][0]["cause"]["seats"] == found.prices.moves[0].cause.seats


def test_a_store_may_lie_under_any_name(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "it's [night] *?", create=True)
    last, tonight = moved_nights(store, tmp_path)
    found = find_changes(tonight, last).products
    assert found.parts_compared == 1
    assert found.closed_totals.products == (connections(last)["open"] & ~connections(tonight)["open"]).sum() > 0


def test_lists_need_a_length() -> None:
    with pytest.raises(SettingError):
        ChangesOptions(top=0)
