"""Connections against a search that looks at every pair and path, against networkx, and under reordering."""

from __future__ import annotations

import os
from collections import Counter
from dataclasses import replace
from datetime import UTC, datetime
from itertools import pairwise
from unittest.mock import patch

import networkx as nx
import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from legworth.schedules import connection_links, connection_search
from legworth.schedules.connection_report import RULES
from legworth.schedules.connections import Connections, build_connections
from network import BookingCurves, Demand, Network, route_graph
from network.arrays import BoolArray, IntArray
from network.connection_settings import ConnectionRules
from tests.legworth.schedules.connection_reference import Reference, Schedule, crowded, rule_sets, schedules
from tests.networks import examples

SCHEDULES = int(os.environ.get("LEGWORTH_DRAWN_SCHEDULES", "200"))
"""Crowded schedules that are drawn; more by this environment variable."""


def may_be_sold(names: tuple[str, ...]) -> bool:
    """A rule of no meaning about the first and last leg."""
    return (int(names[0][1:]) + 2 * int(names[-1][1:])) % 5 > 0


def build(schedule: Schedule, rules: ConnectionRules, *, restricted: bool = False) -> Connections:
    def permitted(start: IntArray, leg: IntArray) -> BoolArray:
        names = [tuple(schedule.legs.name[leg[begin:end]]) for begin, end in pairwise(start)]
        return np.array([may_be_sold(path) for path in names], dtype=bool)

    return build_connections(
        schedule.legs,
        schedule.stations,
        rules,
        kind=schedule.kind,
        through=schedule.through,
        wanted=schedule.pairs,
        permitted=permitted if restricted else None,
        examples=3,
    )


def leg_names(connections: Connections, schedule: Schedule) -> list[tuple[str, ...]]:
    names = schedule.legs.name[connections.path_leg]
    return [tuple(names[begin:end]) for begin, end in pairwise(connections.path_start)]


def check(
    schedule: Schedule, rules: ConnectionRules, at_once: int, *, restricted: bool = False
) -> tuple[Connections, Reference]:
    """Hold connections, found in blocks of some size, against the reference."""
    with (
        patch.object(connection_search, "JOURNEYS_AT_ONCE", at_once),
        patch.object(connection_search, "ORIGINS_AT_ONCE", at_once),
        patch.object(connection_links, "PAIRS_AT_ONCE", at_once),
    ):
        found = build(schedule, rules, restricted=restricted)
    names = leg_names(found, schedule)
    reference = Reference(schedule, rules, may_be_sold if restricted else lambda names: True)
    assert sorted(names) == sorted(reference.paths())
    assert len(set(found.itinerary)) == len(found) == len(names)
    assert {rule: what.count for rule, what in found.dropped.items() if what.count} == +reference.dropped
    assert found.unjudged == reference.unjudged
    for what in found.dropped.values():
        assert len(what.examples) == min(what.count, 3)
    return found, reference


@given(schedules(), rule_sets(), st.sampled_from([1, 7, 1_000_000]), st.booleans())
@examples(300)
def test_itineraries_and_counts_are_those_of_the_rules_in_words(
    schedule: Schedule, rules: ConnectionRules, at_once: int, restricted: bool
) -> None:
    check(schedule, rules, at_once, restricted=restricted)


def test_so_they_are_on_crowded_schedules_where_every_rule_bites() -> None:
    seen: Counter[str] = Counter()
    for seed in range(SCHEDULES):
        found, reference = check(*crowded(seed), at_once=[1, 7, 1_000_000][seed % 3], restricted=seed % 4 == 0)
        seen.update((+reference.dropped).keys())
        seen.update(f"{vehicles} vehicles" for vehicles in np.unique(found.vehicles))
        seen.update(f"{legs} legs" for legs in np.unique(np.diff(found.path_start)))
    assert all(seen[rule] >= SCHEDULES / 20 for rule in RULES if rule != "wanted"), seen
    assert min(seen["3 vehicles"], seen["3 legs"]) >= SCHEDULES / 20, seen


@given(schedules(), rule_sets(), st.randoms())
@examples(200)
def test_the_order_of_rows_decides_nothing(schedule: Schedule, rules: ConnectionRules, random: object) -> None:
    stops, rides = list(schedule.stops), list(schedule.rides)
    random.shuffle(stops)  # type: ignore[attr-defined]
    random.shuffle(rides)  # type: ignore[attr-defined]
    other = Schedule(tuple(stops), tuple(rides), schedule.wanted)
    one, two = build(schedule, rules), build(other, rules)
    assert one.itinerary.tolist() == two.itinerary.tolist()
    assert one.history_name.tolist() == two.history_name.tolist()
    assert leg_names(one, schedule) == leg_names(two, other)
    assert {rule: what.count for rule, what in one.dropped.items()} == {
        rule: what.count for rule, what in two.dropped.items()
    }


@given(schedules(), st.integers(1, 3))
@examples(200)
def test_paths_are_the_simple_paths_of_networkx_that_time_allows(schedule: Schedule, most_legs: int) -> None:
    # Without coordinates no way is too long.
    schedule = replace(schedule, stops=tuple(replace(stop, place=None) for stop in schedule.stops))
    stations, legs = schedule.stations, schedule.legs
    rules = ConnectionRules(most_legs=most_legs, maximum_connection=10_000, keep_dominated=True)
    found = build_connections(legs, stations, rules)
    network = _network(schedule, found)
    graph = route_graph(network)
    least = dict(zip(stations.name, stations.minimum_connection, strict=True))

    def in_time(path: list[tuple[str, str, str]]) -> bool:
        data = [(end, graph.edges[origin, end, key]) for origin, end, key in path]
        return all(
            (after["departs"] - before["arrives"]) / np.timedelta64(1, "m") >= least[end]
            for (end, before), (_, after) in pairwise(data)
        )

    simple = {
        tuple(key for _, _, key in path)
        for origin in graph
        for destination in graph
        if origin != destination
        for path in nx.all_simple_edge_paths(graph, origin, destination, cutoff=most_legs)
        if in_time(path)
    }
    assert set(leg_names(found, schedule)) == simple


def _network(schedule: Schedule, found: Connections) -> Network:
    """The itineraries as a network without products."""
    nothing, none = np.zeros(0), np.zeros(0, dtype=np.int64)
    return Network(
        name="drawn",
        currency="EUR",
        as_of=datetime(2030, 1, 1, tzinfo=UTC),
        stations=schedule.stations,
        legs=schedule.legs,
        remaining=np.zeros(len(schedule.rides), dtype=np.int64),
        itinerary=found.itinerary,
        path_start=found.path_start,
        path_leg=found.path_leg,
        fare_classes=(),
        product_itinerary=none,
        product_class=none,
        fare=nothing,
        demand=Demand.of(nothing, nothing),
        curve=none,
        curves=BookingCurves(np.zeros(0, dtype=object), np.zeros(1, dtype=np.int64), nothing, nothing),
    )
