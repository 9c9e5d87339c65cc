"""A network is cut into parts without loss, along components, under names that last."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from legworth.refresh import Part, cut_parts
from network import Network, components
from tests.networks import Plan, examples, plans


def dated(network: Network, days: list[int], minutes: list[int]) -> Network:
    """The network with legs that depart on some days after the first, local times at some offset."""
    departs = np.array(days, dtype="datetime64[D]").astype("datetime64[s]") + np.timedelta64(12 * 3600, "s")
    legs = replace(
        network.legs,
        departs=departs,
        arrives=departs + np.timedelta64(3600, "s"),
        departs_offset=np.array(minutes, dtype=np.int64),
    )
    return replace(network, legs=legs)


@st.composite
def dated_networks(draw: st.DrawFn) -> Network:
    network = draw(plans(max_legs=8)).network()
    figures = [draw(st.lists(v, min_size=network.n_legs, max_size=network.n_legs)) for v in (DAYS, OFFSETS)]
    return dated(network, figures[0], figures[1])


DAYS, OFFSETS = st.integers(0, 3), st.sampled_from([-14 * 60, 0, 12 * 60 + 30])
SIZES = st.tuples(st.integers(1, 6), st.integers(1, 8))


@examples(100)
@given(dated_networks(), SIZES)
def test_parts_hold_every_leg_and_itinerary_once_and_no_component_is_torn(
    network: Network, sizes: tuple[int, int]
) -> None:
    parts = cut_parts(network, *sizes)
    assert sorted(np.concatenate([part.legs for part in parts]).tolist()) == list(range(network.n_legs))
    assert sorted(np.concatenate([part.itineraries for part in parts]).tolist()) == list(range(network.n_itineraries))
    assert sum(part.components for part in parts) == len(components(network))
    assert len({part.name for part in parts}) == len(parts)
    for part in parts:
        own = part.network_of(network)  # raises where an itinerary leaves the part
        assert (own.n_products, np.all(np.diff(part.legs) > 0)) == (part.products, True)


@examples(100)
@given(dated_networks(), SIZES)
def test_every_part_sells_something_if_the_network_does(network: Network, sizes: tuple[int, int]) -> None:
    parts = cut_parts(network, *sizes)
    assert all(part.products > 0 for part in parts) or network.n_products == 0


@examples(100)
@given(dated_networks(), SIZES)
def test_parts_are_named_after_the_local_date_of_their_first_departure(
    network: Network, sizes: tuple[int, int]
) -> None:
    local = network.legs.departs + network.legs.departs_offset.astype("timedelta64[m]")
    selling = np.zeros(network.n_legs, dtype=bool)
    for piece in components(network):
        selling[piece.legs] = piece.network.n_products > 0
    for part in cut_parts(network, *sizes):
        first = part.legs[selling[part.legs]] if selling.any() else part.legs
        earliest = first[np.argmin(network.legs.departs[first])]
        assert part.name.startswith(str(local[earliest].astype("datetime64[D]")))


def test_a_large_component_is_a_part_and_small_ones_are_bundled_up_to_a_size() -> None:
    product = (100.0, 1.0, 1.0)
    paths = ((0, 1), (2,), (3,), (4,), (5,))
    plan = Plan((5,) * 6, paths, ((product,) * 4, *((product,) * 2 for _ in paths[1:])))
    parts = cut_parts(dated(plan.network(), [0] * 6, [0] * 6), large=4, bundle_most=4)
    assert [(part.name, part.legs.tolist(), part.components) for part in parts] == [
        ("1970-01-01", [0, 1], 1),
        ("1970-01-01-2", [2, 3], 2),
        ("1970-01-01-3", [4, 5], 2),
    ]


def test_a_part_keeps_its_name_when_days_are_added_and_taken_away() -> None:
    product = (100.0, 1.0, 1.0)
    network = Plan((5,) * 4, ((0,), (1,), (2,), (3,)), ((product,),) * 4).network()

    def names(days: list[int]) -> dict[str, tuple[str, ...]]:
        return {p.name: tuple(network.legs.name[p.legs]) for p in cut_parts(dated(network, days, [0] * 4))}

    before, after = names([1, 2, 2, 3]), names([9, 2, 2, 3])
    same = {"1970-01-03", "1970-01-04"}
    assert {name: before[name] for name in same} == {name: after[name] for name in same}
    assert set(before) ^ set(after) == {"1970-01-02", "1970-01-10"}


def test_no_legs_make_no_parts() -> None:
    empty = Plan((), (), ()).network()
    found: list[Part] = cut_parts(empty)
    assert found == []
