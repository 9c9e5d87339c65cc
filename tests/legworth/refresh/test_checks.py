"""Every check passes at its limit, stops beyond it, and names the worst offender first."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta

import numpy as np
import pandas as pd
import pytest

from legworth.refresh.checks import TITLES, NightLegs, check_line, check_night
from legworth.store import Check
from network.refresh_settings import RefreshSettings

AS_OF = datetime(2030, 2, 25, 1, 30, tzinfo=UTC)
COUNT = 20


def legs(as_of: datetime = AS_OF, **columns: list[float]) -> NightLegs:
    """Twenty legs that depart a day apart, the first half a day after the snapshot."""
    departs = [AS_OF + timedelta(days=n + 0.5) for n in range(COUNT)]
    figures = {"capacity": 100.0, "remaining": 50.0, "demand": 40.0, "highest_fare": 200.0, "bid_price": 80.0}
    frame = pd.DataFrame({"departs": pd.to_datetime(departs), **{n: np.full(COUNT, v) for n, v in figures.items()}})
    frame.index = pd.Index([f"L{n:02d}" for n in range(COUNT)])
    return NightLegs(frame.assign(**columns), as_of)


def first(count: int, value: float, other: float) -> list[float]:
    return [value - n for n in range(count)] + [other] * (COUNT - count)


def one(name: str, tonight: NightLegs, last: NightLegs | None, limits: RefreshSettings) -> Check:
    return next(check for check in check_night(tonight, last, limits, ()) if check.name == name)


@dataclass(frozen=True)
class Case:
    """A setting, its value, and a night whose first ``n`` legs are at fault: n = at passes, one more does not."""

    limits: dict[str, float]
    at: int
    night: Callable[[int], NightLegs]
    worst: str


def without(count: int) -> NightLegs:
    whole = legs()
    return NightLegs(whole.frame.iloc[count:], whole.as_of)


LEGS = {
    "no_demand": Case({"no_demand_share": 0.1}, 2, lambda n: legs(demand=[0.0] * n + [40.0] * (COUNT - n)), "L00"),
    "demand_legs": Case(
        {"demand_share": 0.15, "demand_factor": 2.0, "demand_least": 5},
        3,
        lambda n: legs(demand=first(n, 90.0, 40.0)),
        "L00: demand to come 40.0 -> 90.0",
    ),
    "capacity_legs": Case(
        {"capacity_share": 0.1, "capacity_factor": 1.5},
        2,
        lambda n: legs(capacity=first(n, 160.0, 100.0)),
        "L00: seats 100 -> 160",
    ),
    "prices": Case(
        {"price_share": 0.2, "price_factor": 1.5, "price_least": 0.1},
        4,
        lambda n: legs(bid_price=first(n, 150.0, 80.0)),
        "L00: bid price 80.00 -> 150.00",
    ),
    "above_fare": Case(
        {"above_fare_share": 0.05}, 1, lambda n: legs(bid_price=first(n, 210.0, 80.0)), "L00: bid price 210.00"
    ),
    "zero": Case({"zero_share": 0.5}, 10, lambda n: legs(bid_price=[0.0] * n + [80.0] * (COUNT - n)), "L00"),
    "missing": Case({"missing_share": 0.1}, 2, without, "L00"),
}


@pytest.mark.parametrize("name", LEGS)
def test_a_share_of_legs_passes_at_its_limit_and_not_beyond(name: str) -> None:
    case = LEGS[name]
    limits = RefreshSettings(few_legs=0, **case.limits)  # type: ignore[arg-type]
    at, beyond = (one(name, case.night(n), legs(), limits) for n in (case.at, case.at + 1))
    assert (at.passed, at.found) == (True, pytest.approx(at.limit))
    assert (beyond.passed, beyond.found) == (False, pytest.approx((case.at + 1) / COUNT))
    assert beyond.look_at[0].startswith(case.worst)
    assert len(beyond.look_at) == min(case.at + 1, 10)
    assert TITLES[name][0] in check_line(beyond)
    assert beyond.look_at[0] in check_line(beyond)


@pytest.mark.parametrize("name", sorted(set(LEGS) - {"above_fare"}))
def test_a_few_legs_never_stop_a_night(name: str) -> None:
    case = LEGS[name]
    share = next(iter(case.limits))
    limits = RefreshSettings(few_legs=2, **{**case.limits, share: 0.0})  # type: ignore[arg-type]
    assert one(name, case.night(2), legs(), limits).passed
    assert not one(name, case.night(3), legs(), limits).passed


@pytest.mark.parametrize(("name", "column"), [("demand_total", "demand"), ("capacity_total", "capacity")])
@pytest.mark.parametrize("sign", [-1, 1])
def test_a_total_passes_at_its_limit_and_not_beyond(name: str, column: str, sign: int) -> None:
    limits = RefreshSettings(demand_total=0.25, capacity_total=0.25)
    usual = float(legs().frame[column].iloc[0])
    for share, passes in ((0.25, True), (0.2501, False)):
        move = np.zeros(COUNT)
        move[3], move[7] = 0.7 * sign * share * usual * COUNT, 0.3 * sign * share * usual * COUNT
        check = one(name, legs(**{column: (usual + move).tolist()}), legs(), limits)
        assert (check.passed, check.found) == (passes, pytest.approx(share))
        assert [line.split(":")[0] for line in check.look_at] == ["L03", "L07"]


def test_an_older_snapshot_passes_within_its_hours_and_not_beyond() -> None:
    limits = RefreshSettings(older_hours=3)
    for hours, passes in ((-24.0, True), (0.0, True), (3.0, True), (3.1, False)):
        check = one("snapshot", legs(AS_OF - timedelta(hours=hours)), legs(), limits)
        assert (check.passed, check.found) == (passes, pytest.approx(max(hours, 0.0)))


def test_a_part_without_certificate_never_passes() -> None:
    check = next(c for c in check_night(legs(), legs(), RefreshSettings(), ("2030-03-01",)) if c.name == "certificates")
    assert (check.passed, check.look_at) == (False, ("2030-03-01",))


def test_a_sound_night_passes_everything_beside_itself_and_alone() -> None:
    for last in (legs(), None):
        checks = check_night(legs(), last, RefreshSettings(few_legs=0), ())
        assert [check.name for check in checks] == list(TITLES)
        assert all(check.passed for check in checks)
        compared = {check.name for check in checks if check.found is not None}
        assert compared == (set(TITLES) if last else {"certificates", "no_demand", "above_fare", "zero"})
        assert all(check_line(check) for check in checks)


def test_departed_legs_are_not_missed_and_not_looked_at() -> None:
    limits = RefreshSettings(few_legs=0, missing_share=0, no_demand_share=0, price_share=0, demand_total=0)
    later = AS_OF + timedelta(days=2)
    tonight = without(2)
    assert one("missing", NightLegs(tonight.frame, later), legs(), limits).passed
    assert not one("missing", NightLegs(tonight.frame, AS_OF), legs(), limits).passed
    spoilt = legs(later, demand=[0.0] * 2 + [40.0] * 18, bid_price=[900.0] * 2 + [80.0] * 18)
    assert all(check.passed for check in check_night(spoilt, legs(), limits, ()))


def test_a_price_counts_as_moved_only_if_the_move_is_worth_something() -> None:
    limits = RefreshSettings(few_legs=0, price_share=0, price_least=0.1)
    small, large = [19.9] + [80.0] * 19, [20.0] + [80.0] * 19
    nothing = legs(bid_price=[0.0] + [80.0] * 19)
    assert one("prices", legs(bid_price=small), nothing, limits).passed
    assert not one("prices", legs(bid_price=large), nothing, limits).passed


def test_a_price_at_the_highest_fare_is_not_above_it() -> None:
    limits = RefreshSettings()
    assert one("above_fare", legs(bid_price=[200.0 * (1 + 1e-9)] * COUNT), None, limits).passed
    assert not one("above_fare", legs(bid_price=[200.1] + [80.0] * 19), None, limits).passed


def test_a_night_without_legs_on_sale_divides_nothing_by_nothing() -> None:
    gone = AS_OF + timedelta(days=99)
    checks = check_night(legs(gone), legs(gone), RefreshSettings(), ())
    assert all(check.passed and check.found == 0 for check in checks)
