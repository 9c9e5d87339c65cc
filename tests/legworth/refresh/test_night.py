"""A night is published whole or not at all, takes over what has not changed, and stops when a check says so."""

from __future__ import annotations

import io
import json
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from legworth.pricing import price_folder
from legworth.refresh import PartOutput, RefreshOptions, night, night_verdict, refresh, tasks
from legworth.refresh.part_folder import parquet_bytes
from legworth.store import Night, NightDamagedError, Store, StoreBusyError
from lp import LpOptions, Method
from network import InputError, SettingError, SolverStoppedError, read_folder
from network.errors import NightStopped
from tests.folders import Folder
from tests.legworth.refresh.nights import PRICING, Fails, Litters, Spoils, contents, in_force, limits, make

FIRST, MIDDLE, LAST = "2030-03-01", "2030-03-02", "2030-03-03"


@pytest.fixture
def store(tmp_path: Path) -> Path:
    return tmp_path / "nights"


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return Folder().write(tmp_path / "folder")


def again(folder: Folder, store: Path, **how: object) -> Night:
    """Write a folder and make a night of it."""
    return make(folder.write(store.parent / "folder"), store, **how).night  # type: ignore[arg-type]


def taken_over(night: Night) -> dict[str, str | None]:
    return {part.name: part.taken_over_from for part in night.manifest.parts}


def shared(night: Night, last: Night, part: str) -> set[str]:
    """Tables of a part that are the same file in both nights."""
    files = (night.folder / f"part={part}").glob("*.parquet")
    return {path.stem for path in files if path.samefile(last.folder / f"part={part}" / path.name)}


PRICES = {"bid_prices", "protection", "comparison", "connections", "proof"}
INPUTS = {"stations", "legs", "itineraries", "fares", "demand", "booking_curves"}


def events(store: Path, name: str) -> list[dict[str, object]]:
    return [json.loads(line) for line in (store / "log" / f"{name}.jsonl").read_text().splitlines()]


def test_the_first_night_is_in_force_and_says_everything_about_itself(folder: Path, store: Path) -> None:
    found = make(folder, store).night
    manifest, network = found.manifest, read_folder(folder).network
    assert in_force(store) == found
    assert found.name == "00001-2030-02-25"
    assert (manifest.before, manifest.forced, set(manifest.inputs)) == (None, None, {p.name for p in folder.iterdir()})
    assert [part.name for part in manifest.parts] == [FIRST, MIDDLE, LAST]
    assert sum(part.products for part in manifest.parts) == network.n_products
    assert all(one["holds"] for part in manifest.parts for one in part.certificate.values())
    assert all(part.fingerprints.keys() == {"prices", "curves", "tables"} for part in manifest.parts)
    assert manifest.versions.keys() >= {"legworth", "numpy", "code"}
    assert manifest.seconds.keys() >= {"read", "parts", "checks", "changes"}
    assert found.table("bid_prices")["leg"].to_pylist() == network.legs.name.tolist()
    assert {path.name for path in found.folder.iterdir()} >= {"changes.json", "changes.html", "manifest.json"}
    told = json.loads((found.folder / "changes.json").read_bytes())["run"]["rows"]
    assert told == manifest.rows
    assert told["bid_prices"] == network.n_legs
    assert "Rows by table" in (found.folder / "changes.html").read_text()
    assert [e["event"] for e in events(store, found.name)] == [
        *("begun", "read", "last_night", "part", "part", "part", "checks", "published"),
    ]
    assert list((store / "aside").iterdir()) == []


def test_every_part_folder_prices_like_the_part(folder: Path, store: Path) -> None:
    found = make(folder, store).night
    for part in found.parts():
        priced = price_folder(found.folder / f"part={part}")
        table = found.table("bid_prices", parts=[part])
        assert table["bid_price"].to_numpy() == pytest.approx(priced.solution.bid_price, abs=1e-9)


def test_an_unchanged_night_is_taken_over_whole_and_certified_again(folder: Path, store: Path) -> None:
    first = make(folder, store).night
    second = make(folder, store).night
    assert set(taken_over(second).values()) == {first.name}
    assert contents(first).keys() == contents(second).keys()
    assert {n: d for n, d in contents(first).items() if "summary" not in n} == {
        n: d for n, d in contents(second).items() if "summary" not in n
    }
    assert shared(second, first, FIRST) == PRICES | INPUTS | {"price_curves"}
    for part in second.manifest.parts:
        assert all(one["holds"] for one in part.certificate.values())


def test_a_day_later_prices_are_taken_over_and_curves_are_not(store: Path) -> None:
    first = again(Folder(), store)
    second = again(Folder().replace("network.toml", "2030-02-25T02:30", "2030-02-26T02:30"), store)
    assert set(taken_over(second).values()) == {first.name}
    assert shared(second, first, FIRST) == PRICES | INPUTS
    days = [night.table("price_curves", parts=[FIRST])["days_before"].to_numpy().max() for night in (first, second)]
    assert days[0] - days[1] == pytest.approx(1.0)


def test_only_the_part_that_changed_is_solved(store: Path) -> None:
    first = again(Folder(), store)
    second = again(Folder().cell("legs.csv", 5, "sold", "7"), store)
    assert taken_over(second) == {FIRST: first.name, MIDDLE: None, LAST: first.name}
    assert shared(second, first, MIDDLE) <= INPUTS - {"legs"}
    fresh = make(store.parent / "folder", store.parent / "other").night
    for name in ("bid_prices", "price_curves", "leg_totals"):
        column = {"leg_totals": "mean_demand_price"}.get(name, "bid_price")
        both = [night.table(name)[column].to_numpy() for night in (second, fresh)]
        assert both[0] == pytest.approx(both[1], abs=1e-9)


def test_what_was_taken_over_is_certified_and_solved_if_it_does_not_hold(
    folder: Path, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    first = make(folder, store).night
    monkeypatch.setattr(tasks, "certify_again", lambda *_: None)
    second = make(folder, store).night
    assert set(taken_over(second).values()) == {None}
    assert second.table("bid_prices").equals(first.table("bid_prices"))


def test_the_randomised_program_is_solved_every_night(folder: Path, store: Path) -> None:
    pricing = replace(PRICING, lp=LpOptions(Method.RANDOMISED, samples=3))
    first, second = (make(folder, store, pricing=pricing).night for _ in range(2))
    assert set(taken_over(second).values()) == {None}
    assert second.manifest.seed == 1
    prices = [night.table("bid_prices")["bid_price"].to_numpy() for night in (first, second)]
    assert prices[0] == pytest.approx(prices[1], abs=1e-9)


def test_other_settings_are_solved_again(folder: Path, store: Path) -> None:
    make(folder, store)
    second = make(folder, store, pricing=replace(PRICING, lp=LpOptions(Method.DETERMINISTIC)), force="another program")
    assert set(taken_over(second.night).values()) == {None}
    third = make(folder, store, pricing=replace(PRICING, curves=None), force="back again").night
    assert "price_curves" not in third.manifest.rows


def test_wrong_tables_are_all_told_and_nothing_is_published(folder: Path, store: Path) -> None:
    first = make(folder, store).night
    (folder / "fares.csv").write_bytes(Folder().cell("fares.csv", 2, "fare", "-1").bytes("fares.csv"))
    (folder / "legs.csv").write_bytes(Folder().cell("legs.csv", 3, "sold", "x").bytes("legs.csv"))
    with pytest.raises(InputError) as caught:
        make(folder, store)
    assert [fault.file for fault in caught.value.faults] == ["fares.csv", "legs.csv"]
    assert in_force(store) == first
    assert events(store, "00002-2030-02-25")[-1]["event"] == "failed"


@pytest.mark.parametrize("what", ["missing", "no settings", "bad settings"])
def test_a_folder_that_cannot_be_read_makes_no_store(what: str, tmp_path: Path, store: Path) -> None:
    folder = Folder()
    if what == "no settings":
        folder.drop("network.toml")
    if what == "bad settings":
        limits(folder, price_share=1.5)
    place = tmp_path / "nowhere" if what == "missing" else folder.write(tmp_path / "folder")
    with pytest.raises(InputError, match="network.toml" if "settings" in what else "no such folder"):
        make(place, store)
    assert not store.exists()


def test_what_a_killed_solver_leaves_goes_with_the_night(folder: Path, store: Path, tmp_path: Path) -> None:
    note = tmp_path / "note"
    found = refresh(folder, store, RefreshOptions(PRICING), task=Litters(note)).night
    litter = Path(note.read_text())
    assert (litter.parent.parent, litter.parent.name) == ((store / "aside").resolve(), f"{found.name}.solvers")
    assert in_force(store) == found
    assert list((store / "aside").iterdir()) == []


def test_who_looks_for_causes_writes_into_what_the_next_night_clears(
    folder: Path, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    find, asked = night_verdict.find_changes, []

    def finding(*arguments: Any) -> Any:
        asked.append(arguments[-1].explain.scratch)
        return find(*arguments)

    monkeypatch.setattr(night_verdict, "find_changes", finding)
    make(folder, store)
    assert asked == [(store / "aside").resolve()]
    left = store / "aside" / "legworth-causes-left"
    left.mkdir()
    make(folder, store)
    assert not left.exists()


def test_a_part_without_optimum_stops_the_night_and_the_last_stays_in_force(folder: Path, store: Path) -> None:
    first = make(folder, store).night
    with pytest.raises(SolverStoppedError, match=f"part {MIDDLE}: gave up"):
        make(folder, store, task=Fails(MIDDLE), force="whatever it takes")
    assert in_force(store) == first
    assert list((store / "aside").iterdir()) == []


def uncertified(output: PartOutput) -> PartOutput:
    certificates = {n: replace(c, capacity_violation=1.0) for n, c in output.certificates.items()}
    return replace(output, certificates=certificates)


def test_a_part_without_certificate_is_never_published_not_even_by_force(folder: Path, store: Path) -> None:
    first = make(folder, store).night
    with pytest.raises(Exception, match="cannot be forced") as caught:
        make(folder, store, task=Spoils(MIDDLE, uncertified), force="whatever it takes")
    assert caught.value.exit_code == 3  # type: ignore[attr-defined]
    assert in_force(store) == first


STRICT = {"few_legs": 0}
STOPPING: dict[str, tuple[Callable[[Folder], Folder], str]] = {
    "demand_total": (lambda f: f.frame("demand.csv", lambda t: t.assign(mean=t["mean"].astype(float) * 1.3)), "L1: "),
    "demand_legs": (lambda f: f.cell("demand.csv", 16, "mean", "60"), "L4: demand to come"),
    "capacity_total": (lambda f: f.cell("legs.csv", 2, "capacity", "40"), "L1: 24.0 -> 40.0"),
    "capacity_legs": (lambda f: f.cell("legs.csv", 6, "capacity", "21"), "L5: seats 10 -> 21"),
    "prices": (lambda f: f.cell("legs.csv", 6, "sold", "9"), "L5: bid price"),
    "no_demand": (
        lambda f: f.frame("demand.csv", lambda t: t.assign(mean=t["mean"].where(t["itinerary"] != "OST-NOR", "0"))),
        "L4: 6 seats left and no demand",
    ),
    "missing": (
        lambda f: (
            f.line("legs.csv", 6, None)
            .frame("itineraries.csv", lambda t: t[t["legs"] != "L5"])
            .frame("fares.csv", lambda t: t[t["itinerary"] != "SUD-HUB"])
            .frame("demand.csv", lambda t: t[t["itinerary"] != "SUD-HUB"])
        ),
        "L5: departs 2030-03-03",
    ),
    "snapshot": (lambda f: f.replace("network.toml", "2030-02-25T02:30", "2030-02-24T02:30"), "as_of is 2030-02-24"),
    "zero": (lambda f: f.cell("legs.csv", 5, "capacity", "300"), "L4: demand of"),
}
TIGHT = {
    "no_demand": {"no_demand_share": 0.1},
    "zero": {"zero_share": 0.0},
}


@pytest.mark.parametrize("name", STOPPING)
def test_a_check_stops_the_night_says_what_to_look_at_and_can_be_forced(name: str, store: Path) -> None:
    change, look = STOPPING[name]
    settings = {**STRICT, **TIGHT.get(name, {})}
    first = again(limits(Folder(), **{**settings, "zero_share": 1.0}), store)
    folder = change(limits(Folder(), **settings))
    with pytest.raises(NightStopped) as caught:
        again(folder, store)
    assert caught.value.exit_code == 4
    assert in_force(store) == first
    stopped = json.loads((store / "stopped" / f"{caught.value.night}.json").read_text())
    check = next(check for check in stopped["checks"] if check["name"] == name)
    assert check["passed"] is False
    assert any(look in line for line in check["look_at"])
    assert any(look in reason for reason in caught.value.reasons)
    forced = again(folder, store, force="checked by hand")
    assert in_force(store) == forced
    assert forced.manifest.forced is not None
    assert forced.manifest.forced.reason == "checked by hand"
    assert next(check for check in forced.manifest.checks if check.name == name).passed is False
    assert Store.open(store).history()[-1].event == "force"
    assert forced.number > int(caught.value.night.split("-")[0])


def test_a_bid_price_above_every_fare_stops_the_night(folder: Path, store: Path) -> None:
    def dearer(output: PartOutput) -> PartOutput:
        prices = pq.read_table(io.BytesIO(output.written["bid_prices.parquet"]))
        raised = prices.set_column(1, "bid_price", pa.array(np.full(prices.num_rows, 151.0)))
        return replace(output, written={**output.written, "bid_prices.parquet": parquet_bytes(raised)})

    with pytest.raises(NightStopped, match=r"bid price above every fare.*L4: bid price 151\.00, highest fare 150\.00"):
        make(folder, store, task=Spoils(MIDDLE, dearer))
    assert in_force(store) is None


def test_force_is_noted_only_where_a_check_failed(folder: Path, store: Path) -> None:
    assert make(folder, store, force="just in case").night.manifest.forced is None
    with pytest.raises(SettingError, match="give one after --force"):
        make(folder, store, force=" ")


def test_a_night_that_was_stopped_can_be_mended_and_published(store: Path) -> None:
    again(limits(Folder(), **STRICT), store)
    with pytest.raises(NightStopped):
        again(limits(Folder().cell("legs.csv", 6, "sold", "9"), **STRICT), store)
    second = again(limits(Folder(), **STRICT), store)
    assert in_force(store) == second
    assert second.name == "00003-2030-02-25"


@pytest.mark.parametrize("file", ["manifest.json", f"part={FIRST}/proof.parquet", f"part={FIRST}/legs.parquet"])
def test_a_damaged_last_night_is_not_used(file: str, folder: Path, store: Path) -> None:
    first = make(folder, store).night
    (folder / "network.toml").write_bytes(
        Folder().replace("network.toml", "2030-02-25T02:30", "2030-02-26T02:30").bytes("network.toml")
    )
    second = make(folder, store).night
    path = second.folder / file
    data = path.read_bytes()
    path.unlink()  # not into the file itself, which may be a hard link to the first night's
    path.write_bytes(data[:-1] + bytes([data[-1] ^ 1]))
    third = make(folder, store).night
    assert in_force(store) == third
    assert third.manifest.before == first.name
    assert set(taken_over(third).values()) == {first.name}
    assert [e["event"] for e in events(store, third.name)].count("night_damaged") >= 1


def test_with_every_earlier_night_damaged_tonight_is_compared_with_none(folder: Path, store: Path) -> None:
    first = make(folder, store).night
    (first.folder / "manifest.json").unlink()
    with pytest.raises(NightDamagedError):
        Store.open(store).in_force()
    second = make(folder, store).night
    assert in_force(store) == second
    assert second.manifest.before is None


def test_after_a_restore_tonight_is_compared_with_the_night_restored(store: Path) -> None:
    first = again(Folder(), store)
    again(Folder().cell("legs.csv", 5, "sold", "7"), store)
    Store.open(store).restore(first.name, "desk", "wrong seats")
    third = again(Folder(), store)
    assert third.manifest.before == first.name
    assert set(taken_over(third).values()) == {first.name}


def test_a_second_refresh_at_the_same_time_is_refused_at_once(folder: Path, store: Path) -> None:
    first = make(folder, store).night
    with Store.open(store).lock(), pytest.raises(StoreBusyError):
        make(folder, store)
    assert in_force(store) == first


def test_a_clock_set_back_changes_nothing_in_the_order_of_nights(
    folder: Path, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    first = make(folder, store).night
    real = time.time
    monkeypatch.setattr(time, "time", lambda: real() - 10 * 86_400)
    second = make(folder, store).night
    assert in_force(store) == second
    assert [night.name for night in Store.open(store).nights()] == [first.name, second.name]


def test_tables_of_another_snapshot_while_the_night_begins_stop_it(
    folder: Path, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    first = make(folder, store).night
    take = night.take_snapshot

    def late(*arguments: object) -> object:
        (folder / "network.toml").write_bytes(
            Folder().replace("network.toml", "2030-02-25T02:30", "2030-02-26T02:30").bytes("network.toml")
        )
        return take(*arguments)  # type: ignore[arg-type]

    monkeypatch.setattr(night, "take_snapshot", late)
    with pytest.raises(SettingError, match="of another snapshot"):
        make(folder, store)
    assert in_force(store) == first


def test_a_report_that_fails_is_noted_and_the_prices_are_published(
    folder: Path, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fails(*_: object) -> None:
        raise ZeroDivisionError("no change")

    monkeypatch.setattr(night_verdict, "find_changes", fails)
    found = make(folder, store).night
    assert in_force(store) == found
    assert not (found.folder / "changes.html").exists()
    assert any(e["event"] == "changes_failed" and e["trace"] for e in events(store, found.name))


def test_nights_that_the_rule_does_not_keep_are_removed(store: Path) -> None:
    def folder() -> Folder:
        return Folder().add("network.toml", "[store]", "keep_newest = 2", "keep_weeks = 0", "keep_months = 0")

    names = [again(folder(), store).name for _ in range(3)]
    assert [found.name for found in Store.open(store).nights()] == names[1:]
    last = make(store.parent / "folder", store)
    assert last.removed == (names[1],)
    assert in_force(store) == last.night
