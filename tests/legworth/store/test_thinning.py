"""Which nights are kept: a worked example, and what holds for every rule."""

from __future__ import annotations

from datetime import date, datetime, timedelta, timezone
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from legworth.store import NightDamagedError, Store
from legworth.store.manifest import night_name
from legworth.store.thinning import freed_bytes, kept_nights, reasons_to_keep
from network.store_settings import StoreSettings
from tests.legworth.store.small_nights import PARTS, price_of, publish
from tests.networks import examples

rules = st.builds(
    StoreSettings, keep_newest=st.integers(1, 9), keep_weeks=st.integers(0, 5), keep_months=st.integers(0, 5)
)
gaps = st.lists(st.sampled_from([0, 1, 1, 1, 2, 5, 9, 40]), min_size=1, max_size=60)


def names_of(days: list[date]) -> list[str]:
    return [f"{number:05d}-{day.isoformat()}" for number, day in enumerate(days, start=1)]


def days_of(steps: list[int]) -> list[date]:
    days = [date(2030, 1, 1)]
    for step in steps:
        days.append(days[-1] + timedelta(days=step))
    return days


def test_two_years_of_nights() -> None:
    """Worked by hand with a calendar: 2031-12-31 is a Wednesday, so the Mondays are 12-29, 12-22, and so on."""
    days = [date(2030, 1, 1) + timedelta(days=n) for n in range(730)]
    kept = sorted(name.split("-", 1)[1] for name in kept_nights(names_of(days), StoreSettings()))
    newest = [f"2031-12-{day}" for day in range(18, 32)]
    weeks = ["2031-10-27", "2031-11-03", "2031-11-10", "2031-11-17", "2031-11-24"]
    weeks += ["2031-12-01", "2031-12-08", "2031-12-15"]
    months = ["2030-12-01", *(f"2031-{month:02d}-01" for month in range(1, 13))]
    assert kept == sorted({*newest, *weeks, *months})


@examples(200)
@given(steps=gaps, rule=rules)
def test_what_every_rule_keeps(steps: list[int], rule: StoreSettings) -> None:
    days = days_of(steps)
    names = names_of(days)
    kept = kept_nights(names, rule)
    assert set(names[-rule.keep_newest :]) <= kept <= set(names)
    assert len(kept) <= rule.keep_newest + rule.keep_weeks + rule.keep_months
    assert kept_nights(sorted(kept), rule) == kept, "thinning again changes nothing"
    for name in kept - set(names[-rule.keep_newest :]):
        day = date.fromisoformat(name.split("-", 1)[1])
        before = [other for other in days if other < day]
        first_of_week = all(other.isocalendar()[:2] != day.isocalendar()[:2] for other in before)
        first_of_month = all((other.year, other.month) != (day.year, day.month) for other in before)
        assert first_of_week or first_of_month


@examples(100)
@given(steps=gaps, rule=rules)
def test_thinning_every_night_keeps_what_thinning_at_the_end_keeps(steps: list[int], rule: StoreSettings) -> None:
    names = names_of(days_of(steps))
    held: list[str] = []
    for name in names:
        held = sorted(kept_nights([*held, name], rule))
    assert set(held) == kept_nights(names, rule)


def test_the_local_date_of_the_snapshot_decides() -> None:
    evening = datetime(2030, 2, 25, 22, 0, tzinfo=timezone(timedelta(hours=-5)))
    assert night_name(1, evening) == "00001-2030-02-25"
    assert night_name(123_456, evening) == "123456-2030-02-25"


def test_thinning_leaves_what_is_in_force_the_newest_and_shared_files(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    nights = [publish(store, 1.0, day=0)]
    for day in range(1, 8):
        nights.append(publish(store, 1.0, day=day, last=nights[-1]))
    late = publish(store, 1.0, day=-300, last=nights[-1])
    store.restore(nights[2].name, "desk", "later nights are doubtful")
    rule = StoreSettings(keep_newest=2, keep_weeks=0, keep_months=0)
    gone = store.thin(rule)
    kept = [nights[2].name, nights[6].name, nights[7].name, late.name]
    assert [night.name for night in store.nights()] == kept
    assert gone == tuple(night.name for night in nights if night.name not in kept)
    assert store.thin(rule) == ()
    assert not nights[0].folder.exists()
    assert nights[7].verify() == late.verify() == ()
    assert (late.folder / f"part={PARTS[-1]}" / "bid_prices.parquet").stat().st_nlink == 4
    assert store.in_force() == nights[2]
    assert price_of(nights[2]) == 1.0
    assert [entry.night for entry in store.history() if entry.event == "thin"] == list(gone)
    assert publish(store).number == 10
    assert list((store.path / "aside").iterdir()) == []


def test_the_night_before_the_one_in_force_stays_and_every_night_that_stays_says_why(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    nights = [publish(store, day=0)]
    for day in range(1, 5):
        nights.append(publish(store, day=day, before=nights[-1].name))
    rule = StoreSettings(keep_newest=1, keep_weeks=0, keep_months=0)
    store.restore(nights[2].name, "desk", "later nights are doubtful")
    plan = store.thinning(rule)
    assert plan.kept == {
        nights[1].name: "the night before the one in force",
        nights[2].name: "in force",
        nights[4].name: "among the newest 1",
    }
    assert plan.gone == (nights[0].name, nights[3].name)
    assert len(store.nights()) == 5, "looking removes nothing"
    (nights[2].folder / "manifest.json").write_text("{")
    assert store.thinning(rule) == plan, "where it cannot be read which night that was, the next earlier one stays"
    assert store.thin(rule, "room is short") == plan.gone
    assert [(entry.night, entry.reason) for entry in store.history() if entry.event == "thin"] == [
        (name, "room is short") for name in plan.gone
    ]


def test_nothing_is_thinned_while_nobody_can_tell_which_night_is_in_force(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    for day in range(4):
        publish(store, day=day)
    (store.path / "in_force").write_text("night")
    rule = StoreSettings(keep_newest=1, keep_weeks=0, keep_months=0)
    with pytest.raises(NightDamagedError, match="in_force is damaged"):
        store.thin(rule)
    assert len(store.nights()) == 4


@examples(100)
@given(steps=gaps, rule=rules)
def test_every_reason_is_true(steps: list[int], rule: StoreSettings) -> None:
    names = names_of(days_of(steps))
    for name, reason in reasons_to_keep(names, rule).items():
        day = date.fromisoformat(name.split("-", 1)[1])
        earlier = [date.fromisoformat(other.split("-", 1)[1]) for other in names if other < name]
        if reason.startswith("among the newest"):
            assert name in names[-rule.keep_newest :]
        elif reason == "the first of its week":
            assert day.isocalendar()[:2] not in {other.isocalendar()[:2] for other in earlier}
        else:
            assert reason == "the first of its month"
            assert (day.year, day.month) not in {(other.year, other.month) for other in earlier}


def test_room_is_counted_once_and_only_where_no_other_night_holds_it(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    first = publish(store, 1.0, day=0)
    second = publish(store, 2.0, day=1, last=first)
    third = publish(store, 3.0, day=2, last=second)
    shared = first.folder / f"part={PARTS[-1]}" / "bid_prices.parquet"
    assert shared.stat().st_nlink == 3

    def room(*folders: Path) -> int:
        return sum(path.stat().st_size for folder in folders for path in folder.rglob("*") if path.is_file())

    both = [first.folder, second.folder]
    assert freed_bytes(both) == room(*both) - 2 * shared.stat().st_size
    assert freed_bytes([*both, third.folder]) == room(*both, third.folder) - 2 * shared.stat().st_size
    assert freed_bytes([tmp_path / "not there"]) == 0


def test_numbers_of_thinned_nights_are_not_given_again(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    first = publish(store, 1.0, day=3)
    publish(store, 2.0, day=0)
    store.restore(first.name, "desk", "the second is of old data")
    assert store.thin(StoreSettings(keep_newest=1, keep_weeks=0, keep_months=0)) == ()
    assert publish(store, 3.0, day=4).number == 3


@pytest.mark.parametrize("wrong", [{"keep_newest": 0}, {"keep_weeks": -1}, {"keep_months": 1.5}, {"keep_years": 1}])
def test_settings_out_of_their_limits_are_refused(wrong: dict[str, object]) -> None:
    with pytest.raises(ValueError, match="validation error"):
        StoreSettings.model_validate(wrong)
