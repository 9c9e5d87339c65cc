"""Local clocks against `zoneinfo`, time by time."""

from __future__ import annotations

from datetime import UTC, date, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from legworth.schedules.local_time import clock_of, instants_of, offsets_at
from network.time_zones import zone_named

ZONES = (
    "Europe/Berlin",
    "America/New_York",
    "Australia/Lord_Howe",
    "America/St_Johns",
    "Pacific/Apia",
    "Asia/Kathmandu",
    "Africa/Casablanca",
    "Pacific/Kiritimati",
    "UTC",
)
NAMES = np.array(ZONES, dtype=object)
MOMENTS = st.datetimes(datetime(2026, 9, 1), datetime(2028, 5, 1)).map(
    lambda moment: moment.replace(microsecond=0, fold=0)
)


def seconds(moment: datetime) -> int:
    return int(moment.replace(tzinfo=UTC).timestamp())


def by_zoneinfo(moment: datetime, zone: str) -> tuple[int, int, bool, bool]:
    """Instant, offset, gap and fold of a local time, as PEP 495 tells them apart."""
    first, second = (moment.replace(tzinfo=ZoneInfo(zone), fold=fold) for fold in (0, 1))
    there = first.astimezone(UTC).astimezone(ZoneInfo(zone)).replace(tzinfo=None) == moment
    twice = first.utcoffset() != second.utcoffset()
    offset = first.utcoffset() or timedelta()
    return int(first.timestamp()), int(offset.total_seconds()), not there, twice and there


@settings(deadline=None)
@given(st.lists(st.tuples(MOMENTS, st.sampled_from(range(len(ZONES)))), min_size=1, max_size=20))
@example([(datetime(2027, 3, 28, 2, 30), 0), (datetime(2027, 10, 31, 2, 30), 0), (datetime(2027, 10, 31, 3, 0), 0)])
@example([(datetime(2027, 4, 4, 1, 45), 2), (datetime(2027, 10, 3, 2, 15), 2), (datetime(2027, 10, 3, 2, 30), 2)])
def test_instants_are_those_of_zoneinfo(drawn: list[tuple[datetime, int]]) -> None:
    local = np.array([seconds(moment) for moment, _ in drawn])
    found = instants_of(local, np.array([zone for _, zone in drawn]), NAMES)
    expected = [by_zoneinfo(moment, ZONES[zone]) for moment, zone in drawn]
    assert list(
        zip(found.utc.tolist(), found.offset.tolist(), found.gap.tolist(), found.fold.tolist(), strict=True)
    ) == (expected)


@settings(deadline=None)
@given(st.lists(st.tuples(MOMENTS, st.sampled_from(range(len(ZONES)))), min_size=1, max_size=20))
def test_offsets_are_those_of_zoneinfo(drawn: list[tuple[datetime, int]]) -> None:
    utc = np.array([seconds(moment) for moment, _ in drawn])
    found = offsets_at(utc, np.array([zone for _, zone in drawn]), NAMES)
    expected = [moment.replace(tzinfo=UTC).astimezone(ZoneInfo(ZONES[zone])).utcoffset() for moment, zone in drawn]
    assert [timedelta(seconds=offset) for offset in found.tolist()] == expected


@pytest.mark.parametrize("zone", ZONES)
def test_every_change_of_thirty_years_is_found_to_the_second(zone: str) -> None:
    first, last = ((date(year, 1, 1) - date(1970, 1, 1)).days for year in (2010, 2040))
    clock = clock_of(zone, first, last)
    for begins in clock.begins[1:].tolist():
        before, after = (
            datetime.fromtimestamp(second, UTC).astimezone(ZoneInfo(zone)).utcoffset()
            for second in (begins - 1, begins)
        )
        assert before != after
    hours = np.arange(first * 24, last * 24, 5)
    expected = [
        (datetime.fromtimestamp(hour * 3600, UTC).astimezone(ZoneInfo(zone)).utcoffset() or timedelta()).total_seconds()
        for hour in hours[::7].tolist()
    ]
    assert clock.at(hours[::7] * 3600).tolist() == expected


def test_a_date_that_an_island_left_out() -> None:
    """Apia went from the end of 29 December 2011 straight to 31 December (IANA database)."""
    moments = [datetime(2011, 12, 29, 23, 59), datetime(2011, 12, 30, 12, 0), datetime(2011, 12, 31, 0, 0)]
    found = instants_of(
        np.array([seconds(moment) for moment in moments]), np.full(3, ZONES.index("Pacific/Apia")), NAMES
    )
    assert found.gap.tolist() == [False, True, False]
    assert found.utc[2] - found.utc[0] == 60


def test_position_minus_one_is_utc_and_nothing_is_nothing() -> None:
    local = np.array([0, 86400 * 200])
    found = instants_of(local, np.array([-1, -1]), NAMES)
    assert found.utc.tolist() == local.tolist()
    assert found.offset.tolist() == [0, 0]
    assert len(instants_of(local[:0], local[:0], NAMES).utc) == 0


@pytest.mark.parametrize("name", ["Europe/Nowhere", "", "../etc/passwd", "/etc/passwd", "x" * 500, "Europe", "a\0b"])
def test_names_that_are_no_zones(name: str) -> None:
    assert zone_named(name) is None
