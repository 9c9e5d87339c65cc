"""A network in parts is the network as a whole."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lp import LpOptions, Method, NetworkSolution, SolverOptions, solve, solve_network
from network import Component, Network, SolverStoppedError
from network.arrays import FloatArray
from tests.networks import Plan, degenerate_plans, examples, hub_plan, plans


def side_by_side(parts: list[Plan]) -> Plan:
    """One network of several that share nothing; all demands in the family of the first."""
    capacity: tuple[int, ...] = ()
    paths: tuple[tuple[int, ...], ...] = ()
    for part in parts:
        paths += tuple(tuple(leg + len(capacity) for leg in path) for path in part.paths)
        capacity += part.capacity
    return Plan(capacity, paths, tuple(p for part in parts for p in part.products), parts[0].family)


def arrays(found: NetworkSolution) -> list[FloatArray]:
    return [found.bid_price, found.next_seat, found.expected_sales, found.allotted, found.sales]


@given(parts=st.lists(st.one_of(plans(max_legs=3), degenerate_plans()), min_size=1, max_size=3), data=st.data())
@examples(60)
def test_parts_add_up_to_the_whole(parts: list[Plan], data: st.DataObject) -> None:
    plan = side_by_side(parts)
    orders = [data.draw(st.permutations(range(len(each)))) for each in (plan.capacity, plan.paths)]
    network = plan.reordered(*orders).network()
    for method in (Method.DETERMINISTIC, Method.PROBABILISTIC):
        whole, apart = solve(network, LpOptions(method)), solve_network(network, LpOptions(method))
        assert len(apart.parts) >= len(parts)
        assert sorted(leg for piece, _ in apart.parts for leg in piece.legs) == list(range(network.n_legs))
        assert apart.objective == pytest.approx(whole.objective, rel=1e-9, abs=1e-9)
        assert apart.bound == pytest.approx(whole.bound, rel=1e-7, abs=1e-9)
        near = 1e-6 * network.fare.max(initial=1.0)
        np.testing.assert_allclose(apart.bid_price, whole.bid_price, rtol=0, atol=near)
        np.testing.assert_allclose(apart.next_seat, whole.next_seat, rtol=0, atol=near)
        assert apart.sales @ network.fare == pytest.approx(whole.objective, rel=1e-9, abs=1e-9)
        np.testing.assert_allclose(network.leg_load(apart.sales), apart.expected_sales, rtol=1e-9, atol=1e-9)
        assert np.all(network.leg_load(apart.allotted) <= network.remaining + 1e-6)
        assert all(part.certificate.holds for _, part in apart.parts)


@pytest.mark.parametrize("method", list(Method))
def test_side_by_side_in_two_processes_nothing_changes(method: Method) -> None:
    network = side_by_side([hub_plan(1, spokes=3), hub_plan(2, spokes=4), Plan((4,), (), ())]).network()
    options = LpOptions(method, SolverOptions("highs"), samples=3)
    one, two = (solve_network(network, options, jobs=jobs) for jobs in (1, 2))
    assert len(one.parts) == len(two.parts) == 3
    assert one.objective == two.objective
    for left, right in zip(arrays(one), arrays(two), strict=True):
        np.testing.assert_array_equal(left, right)


def test_a_failure_in_another_process_is_the_same_failure() -> None:
    network = side_by_side([hub_plan(1, spokes=3), hub_plan(2, spokes=3)]).network()
    with pytest.raises(SolverStoppedError, match="time limit was 1e-09 s"):
        solve_network(network, LpOptions(solver=SolverOptions("highs", 1e-9)), jobs=2)


def test_progress_and_starts_go_to_their_parts() -> None:
    network = side_by_side([hub_plan(1, spokes=3), hub_plan(2, spokes=4)]).network()
    seen: list[Component] = []
    begun: list[FloatArray | None] = []

    def part(piece: Network, options: LpOptions, start: FloatArray | None) -> object:
        begun.append(start)
        return solve(piece, options, start)

    start = np.arange(14, dtype=np.float64)
    solve_network(network, start=start, progress=seen.append, solve_part=part)
    assert [piece.legs.tolist() for piece in seen] == [list(range(6)), list(range(6, 14))]
    assert [None if begin is None else begin.tolist() for begin in begun] == [list(range(6)), list(range(6, 14))]


def test_nothing_at_all() -> None:
    found = solve_network(Plan((), (), ()).network())
    assert (found.objective, found.bound, found.parts, found.bid_price.shape) == (0, 0, (), (0,))
