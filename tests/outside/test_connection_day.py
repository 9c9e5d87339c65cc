"""Connections of the real hub day against a plain join by pandas, and great circles against reported distances."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from legworth.schedules.connections import Connections, build_connections
from network import Legs, Network, read_folder
from network.connection_settings import ConnectionRules
from network.great_circle import great_circle
from tests.outside.hub_day import HUB, LONGEST_CONNECTION, SHORTEST_CONNECTION, WIDEST_DETOUR, write_hub_day
from tools.reported_day import read_day

DATA = Path(__file__).with_name("data")
RULES = ConnectionRules(maximum_connection=LONGEST_CONNECTION, detour=WIDEST_DETOUR)


@pytest.fixture(scope="module")
def day(tmp_path_factory: pytest.TempPathFactory) -> Network:
    folder = tmp_path_factory.mktemp("hub_day")
    write_hub_day(folder)
    return read_folder(folder).network


def pairs(found: Connections) -> pd.MultiIndex:
    two = np.flatnonzero(np.diff(found.path_start) == 2)
    return pd.MultiIndex.from_arrays([found.path_leg[found.path_start[two] + n] for n in (0, 1)])


def joined(legs: Legs) -> pd.DataFrame:
    """Every arrival with every departure of the same airport, in time, not back to where it came from."""
    frame = pd.DataFrame({"leg": np.arange(len(legs)), "o": legs.origin, "d": legs.destination})
    frame["departs"], frame["arrives"] = legs.departs, legs.arrives
    table = frame.merge(frame, left_on="d", right_on="o", suffixes=("", "_b"))
    wait = (table["departs_b"] - table["arrives"]) / pd.Timedelta(minutes=1)
    return table[wait.between(SHORTEST_CONNECTION, LONGEST_CONNECTION) & (table["o"] != table["d_b"])]


def test_the_hub_connects_what_a_plain_join_of_the_real_day_gives(day: Network) -> None:
    legs, stations = day.legs, day.stations
    table = joined(legs)
    assert (stations.name[table["d"]] == HUB).all()
    everything = build_connections(legs, stations, RULES.model_copy(update={"detour": 1000.0, "keep_dominated": True}))
    assert set(pairs(everything)) == set(zip(table["leg"], table["leg_b"], strict=True))
    assert everything.dropped["detour"].count == 0


def test_and_less_detours_those_that_the_folder_of_the_hub_day_sells(day: Network) -> None:
    # The folder is written by rules of its own (tests.outside.hub_day): 3,610 connections.
    found = build_connections(day.legs, day.stations, RULES.model_copy(update={"keep_dominated": True}))
    two = np.flatnonzero(np.diff(day.path_start) == 2)
    sold = set(zip(*(day.path_leg[day.path_start[two] + n] for n in (0, 1)), strict=True))
    assert set(pairs(found)) == sold
    assert len(sold) == 3610


def test_dominance_on_the_real_day_is_that_of_a_join_with_itself(day: Network) -> None:
    legs = day.legs
    kept = build_connections(legs, day.stations, RULES.model_copy(update={"keep_dominated": True}))
    first, last = kept.path_leg[kept.path_start[:-1]], kept.path_leg[kept.path_start[1:] - 1]
    table = pd.DataFrame(
        {
            "row": np.arange(len(kept)),
            "o": legs.origin[first],
            "d": legs.destination[last],
            "departs": legs.departs[first],
            "arrives": legs.arrives[last],
            "legs": np.diff(kept.path_start),
        }
    )
    both = table.merge(table, on=["o", "d"], suffixes=("", "_b"))
    no_worse = (both["departs_b"] >= both["departs"]) & (both["arrives_b"] <= both["arrives"])
    no_worse &= both["legs_b"] <= both["legs"]
    better = (both[["departs", "arrives", "legs"]].to_numpy() != both[["departs_b", "arrives_b", "legs_b"]]).any(axis=1)
    beaten = set(both.loc[no_worse & better & (both["legs"] > 1), "row"])
    found = build_connections(legs, day.stations, RULES)
    assert set(found.itinerary) == set(np.delete(kept.itinerary, sorted(beaten)))
    assert found.dropped["dominated"].count == len(beaten) > 500


def test_great_circles_are_the_reported_distances() -> None:
    # Distances as reported to the Department of Transportation, whole statute miles. A sphere differs from the
    # ellipsoid by up to 0.56 % (from memory), and airports have an extent.
    flights, airports = read_day(DATA / "cvg_flights_2001-01-10.csv", DATA / "cvg_airports.csv")
    at = airports.set_index("airport")[["latitude", "longitude"]]
    ends = [at.loc[flights[end]].to_numpy().T for end in ("origin", "destination")]
    miles = great_circle(*ends[0], *ends[1]) / 1.609344
    reported = flights["miles"].to_numpy()
    assert np.all(np.abs(miles - reported) <= 1 + 0.0056 * reported)
