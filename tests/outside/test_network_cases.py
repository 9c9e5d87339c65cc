"""Networks: optimal values and prices against figures that others published.

Each case names its source and how well the figure is known: read in a text, `from memory`, or ours. Duals are often
not unique, so a published dual is held against the certificate, and against our prices only where scipy.optimize
finds no other optimal dual. A text's dual of a demand limit is the fare less the prices of the path.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pytest

from lp import SOLVERS, LpOptions, Method, SeatProgram, Solution, SolverOptions, certify, deterministic_columns, solve
from lp.solvers import SolverName
from network import Network
from network.arrays import FloatArray
from tests.lp.reference import OptimalFace, reference
from tests.networks import Plan, sure_plan
from tests.outside.hub_problems import PROBLEMS, HubProblem

Row = tuple[str, float, float, tuple[int, ...]]
"""Name, fare, demand and legs of a product."""


@dataclass(frozen=True)
class Case:
    """A deterministic program with known optimum."""

    seats: tuple[int, ...]
    rows: tuple[Row, ...]
    value: float
    prices: tuple[float, ...]
    sales: dict[str, float]

    def network(self) -> Network:
        """Return the network, one itinerary for every product."""
        return sure_plan(self.seats, [(path, fare, demand) for _, fare, demand, path in self.rows]).network()


# Anderson, Sweeney and Williams, An Introduction to Management Science, revenue management by linear programming: two
# origins P and N, a hub C, two ends M and O, classes Q and Y. Inputs, the value, the sales of PCQ, PMQ, POQ and PCY and
# the duals of the demands for PMQ (85) and PCY (376) read; duals of the legs and other sales from memory, recomputed.
TWO_ORIGINS = Case(
    seats=(132, 132, 132, 132),
    rows=(
        ("PCQ", 178, 33, (0,)),
        ("PMQ", 268, 44, (0, 2)),
        ("POQ", 228, 45, (0, 3)),
        ("PCY", 380, 16, (0,)),
        ("PMY", 456, 6, (0, 2)),
        ("POY", 560, 11, (0, 3)),
        ("NCQ", 199, 26, (1,)),
        ("NMQ", 249, 56, (1, 2)),
        ("NOQ", 349, 39, (1, 3)),
        ("NCY", 385, 15, (1,)),
        ("NMY", 444, 7, (1, 2)),
        ("NOY", 580, 9, (1, 3)),
        ("CMQ", 179, 64, (2,)),
        ("CMY", 380, 8, (2,)),
        ("COQ", 224, 46, (3,)),
        ("COY", 582, 10, (3,)),
    ),
    value=103_103,
    prices=(4, 70, 179, 224),
    sales={"PCQ": 33, "PMQ": 44, "POQ": 22, "PCY": 16, "NMQ": 36, "CMQ": 31, "COQ": 41},
)

# MIT OpenCourseWare 15.071, published notes on connecting flights: two legs, regular and discount fares. From
# memory; the value was confirmed on recomputation, the prices and sales are ours.
CONNECTING = Case(
    seats=(166, 166),
    rows=(
        ("through regular", 428, 80, (0, 1)),
        ("through discount", 190, 120, (0, 1)),
        ("first regular", 642, 75, (0,)),
        ("first discount", 224, 100, (0,)),
        ("second regular", 512, 60, (1,)),
        ("second discount", 190, 110, (1,)),
    ),
    value=120_514,
    prices=(224, 190),
    sales={"through regular": 80, "through discount": 0, "first discount": 11, "second discount": 26},
)

# MIT OpenCourseWare 15.071, published notes on one flight: sales read, value and price follow from them.
ONE_FLIGHT = Case(
    seats=(166,),
    rows=(("regular", 617, 100, (0,)), ("discount", 238, 150, (0,))),
    value=77_408,
    prices=(238,),
    sales={"regular": 100, "discount": 66},
)
FEWER_REGULAR = Case(
    seats=(166,),
    rows=(("regular", 617, 50, (0,)), ("discount", 238, 150, (0,))),
    value=50 * 617 + 116 * 238,
    prices=(238,),
    sales={"regular": 50, "discount": 116},
)

# Schrage, Optimization Modeling, network revenue management: a leg GA into A, legs AC and AN out of it, two classes.
# Inputs read; the answer was not seen, all results are ours (another program).
INTO_AND_OUT = Case(
    seats=(110, 130, 111),
    rows=(
        ("GA1", 190, 49, (0,)),
        ("GA2", 90, 90, (0,)),
        ("GC1", 264, 24, (0, 1)),
        ("GC2", 229, 43, (0, 1)),
        ("GN1", 261, 12, (0, 2)),
        ("GN2", 219, 67, (0, 2)),
        ("AC1", 140, 44, (1,)),
        ("AC2", 95, 69, (1,)),
        ("AN1", 186, 16, (2,)),
        ("AN2", 103, 17, (2,)),
    ),
    value=42_366,
    prices=(190, 74, 29),
    sales={"GA1": 15, "GA2": 0, "GC1": 17, "GC2": 0, "GN1": 12, "GN2": 66, "AC1": 44, "AC2": 69, "AN1": 16, "AN2": 17},
)

# Phillips (2005), Pricing and Revenue Optimization, chapter on network management: flights of 100 and 120 seats in a
# row, full and discount fares. Inputs from memory; the optimum by hand: every full fare is taken, a through discount at
# 170 pays less than the two local discounts at 100 and 80 that it displaces, and both of these are left over.
IN_A_ROW = Case(
    seats=(100, 120),
    rows=(
        ("first full", 150, 30, (0,)),
        ("first discount", 100, 60, (0,)),
        ("second full", 120, 20, (1,)),
        ("second discount", 80, 80, (1,)),
        ("through full", 250, 30, (0, 1)),
        ("through discount", 170, 40, (0, 1)),
    ),
    value=30 * 150 + 40 * 100 + 20 * 120 + 70 * 80 + 30 * 250,
    prices=(100, 80),
    sales={"first discount": 40, "second discount": 70, "through full": 30, "through discount": 0},
)

CASES = {
    "two origins": TWO_ORIGINS,
    "connecting": CONNECTING,
    "one flight": ONE_FLIGHT,
    "fewer regular": FEWER_REGULAR,
    "into and out": INTO_AND_OUT,
    "in a row": IN_A_ROW,
}


def deterministic(network: Network) -> SeatProgram:
    return SeatProgram.of(network, deterministic_columns(network))


def dual_ranges(program: SeatProgram) -> tuple[FloatArray, FloatArray]:
    """Least and greatest price of every leg among all optimal duals."""
    face, unit = OptimalFace(program), np.eye(len(program.capacity))
    return np.array([face.least(u)[0] for u in unit]), np.array([-face.least(-u)[0] for u in unit])


def check_prices(program: SeatProgram, found: Solution, known: Sequence[float], near: float) -> FloatArray:
    """Hold known prices against scipy's optimum and against ours; return whether each leg's price is unique."""
    lowest, highest = dual_ranges(program)
    assert np.all(np.array(known) >= lowest - near)
    assert np.all(np.array(known) <= highest + near)
    unique = highest - lowest <= near
    np.testing.assert_allclose(found.bid_price[unique], np.array(known)[unique], rtol=0, atol=2 * near)
    np.testing.assert_allclose(found.next_seat[unique], np.array(known)[unique], rtol=0, atol=2 * near)
    return unique


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize("case", CASES.values(), ids=CASES)
def test_deterministic_programs_of_textbooks(case: Case, solver: SolverName) -> None:
    network = case.network()
    program = deterministic(network)
    found = solve(network, LpOptions(Method.DETERMINISTIC, SolverOptions(solver)))
    assert found.objective == pytest.approx(case.value, rel=1e-9)
    certificate = certify(program, reference(program).seats, np.array(case.prices, dtype=np.float64))
    assert certificate.holds, certificate.failures
    check_prices(program, found, case.prices, 1e-4)
    names = [name for name, *_ in case.rows]
    for name, sold in case.sales.items():
        assert found.allotted[names.index(name)] == pytest.approx(sold, abs=1e-6), name


def test_prices_of_the_textbooks_are_unique_where_we_think_they_are() -> None:
    for name in ("two origins", "connecting", "one flight", "fewer regular", "into and out", "in a row"):
        lowest, highest = dual_ranges(deterministic(CASES[name].network()))
        np.testing.assert_allclose(lowest, highest, rtol=0, atol=1e-4)


def test_duals_of_demand_in_the_case_of_two_origins() -> None:
    # Read: the text calls these two its bid prices, 85 for PMQ and 376 for PCY, the greatest of all.
    network = TWO_ORIGINS.network()
    contribution = network.fare - network.displacement(solve(network, LpOptions(Method.DETERMINISTIC)).bid_price)
    dual = dict(zip((name for name, *_ in TWO_ORIGINS.rows), np.maximum(contribution, 0.0), strict=True))
    assert dual["PMQ"] == pytest.approx(85)
    assert dual["PCY"] == pytest.approx(376)
    assert max(dual, key=lambda name: dual[name]) == "PCY"


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize("problem", PROBLEMS, ids=lambda problem: f"ratio {problem.ratio:g}")
def test_deterministic_program_of_the_hub_problems(problem: HubProblem, solver: SolverName) -> None:
    """Expected requests as demand. Value and duals are ours (another program); the published bound lies below."""
    network = problem.network()
    found = solve(network, LpOptions(Method.DETERMINISTIC, SolverOptions(solver)))
    assert found.objective == pytest.approx(problem.linear_value, abs=0.01)
    assert problem.published_revenue <= problem.published_bound <= found.objective
    unique = check_prices(deterministic(network), found, (0, 34, 0, 0, 0, 34, 47, 0), 1e-4)
    assert unique.all()


def test_high_fares_alone_are_not_worth_the_seats_of_the_hub() -> None:
    # The high fares differ between the problems by a factor; all of them are sold, so the prices do not differ.
    found = [solve(problem.network(), LpOptions(Method.DETERMINISTIC)) for problem in PROBLEMS]
    np.testing.assert_allclose(found[0].bid_price, found[1].bid_price, rtol=1e-9)


def test_accepting_in_series_by_hand() -> None:
    """Simpson (1989) and Williamson (1992) accept a fare that reaches the sum of the prices of its legs; from memory.

    By hand, four seats on each of three legs in a row: locals at 100 for all three legs, plenty of them, and sure
    through passengers at 290. Three locals displaced pay 300, so through passengers are refused.
    """
    rows = [((0,), 100.0, 9), ((1,), 100.0, 9), ((2,), 100.0, 9), ((0, 1, 2), 290.0, 3), ((0, 1), 200.0, 1)]
    network = sure_plan([4, 4, 4], rows).network()
    found = solve(network, LpOptions(Method.DETERMINISTIC))
    np.testing.assert_allclose(found.bid_price, [100.0, 100.0, 100.0], rtol=1e-9)
    accepted = network.fare >= network.displacement(found.bid_price) * (1 - 1e-9)
    assert accepted.tolist() == [True, True, True, False, True]
    assert found.objective == pytest.approx(1200)


def test_no_optimum_depends_on_how_products_are_grouped() -> None:
    # The same flights with both classes of a path on one itinerary.
    rows = {path: [(f, d, 0.0) for _, f, d, p in IN_A_ROW.rows if p == path] for path in ((0,), (1,), (0, 1))}
    plan = Plan(IN_A_ROW.seats, tuple(rows), tuple(tuple(classes) for classes in rows.values()), "normal")
    found = solve(plan.network(), LpOptions(Method.DETERMINISTIC))
    assert found.objective == pytest.approx(IN_A_ROW.value)
    np.testing.assert_allclose(found.bid_price, IN_A_ROW.prices, rtol=1e-9)
