"""The certificate accepts every optimum and no planted fault."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from lp import SeatProgram, certify, deterministic_columns
from network import NotCertifiedError
from network.arrays import FloatArray
from tests.lp.reference import OptimalFace, Reference, programs, reference
from tests.networks import FAMILIES, Plan, degenerate_plans, examples, plans, sure_plan

ANY = st.one_of(plans(families=FAMILIES[:3]), degenerate_plans(families=FAMILIES[:3]))
FAULT = 1e-4
"""Size of a planted fault, in seats or as a share of the scale of money: a hundred times what is tolerated."""


def optima(plan: Plan) -> list[tuple[SeatProgram, Reference]]:
    """Both programs that have columns, with the optimum of scipy."""
    return [(p, reference(p)) for p in programs(plan.network()).values() if len(p.columns)]


def rejected(program: SeatProgram, seats: FloatArray, prices: FloatArray) -> tuple[str, ...]:
    """Assert that the certificate does not hold and that it says why; return the reasons."""
    certificate = certify(program, seats, prices)
    assert not certificate.holds
    with pytest.raises(NotCertifiedError, match="not certified"):
        certificate.require()
    assert certificate.as_dict()["holds"] is False
    return certificate.failures


@given(plan=ANY)
@examples(100)
def test_an_optimum_is_certified(plan: Plan) -> None:
    for program, known in optima(plan):
        certificate = certify(program, known.seats, known.prices)
        certificate.require()
        assert certificate.primal == pytest.approx(known.value, rel=1e-9, abs=1e-9)
        assert certificate.columns == len(program.columns)


@given(plan=ANY, data=st.data())
@examples(60)
def test_a_price_outside_all_optimal_duals_is_rejected(plan: Plan, data: st.DataObject) -> None:
    for program, known in optima(plan):
        leg = data.draw(st.integers(0, len(program.capacity) - 1))
        alone = (np.arange(len(program.capacity)) == leg).astype(np.float64)
        face, step = OptimalFace(program), FAULT * program.columns.scale
        wrong = [face.least(alone)[0] - step]
        if program.capacity[leg] > 0:
            wrong.append(-face.least(-alone)[0] + step)
        for price in wrong:
            rejected(program, known.seats, np.where(alone > 0, price, known.prices))


@given(plan=ANY, data=st.data())
@examples(60)
def test_a_dropped_column_is_noticed(plan: Plan, data: st.DataObject) -> None:
    for program, known in optima(plan):
        columns = program.columns
        dropped = data.draw(st.integers(0, len(columns) - 1))
        kept = np.arange(len(columns)) != dropped
        start = np.searchsorted(columns.itinerary[kept], np.arange(len(columns.start)))
        less = replace(
            columns, value=columns.value[kept], width=columns.width[kept], product=columns.product[kept], start=start
        )
        found = reference(SeatProgram(program.capacity, program.network, less))
        assume(found.value < known.value * (1 - 1e-5))
        seats = np.zeros(len(columns))
        seats[kept] = found.seats
        rejected(program, seats, found.prices)


@given(plan=ANY, data=st.data())
@examples(60)
def test_broken_capacities_and_bounds_are_rejected(plan: Plan, data: st.DataObject) -> None:
    for program, known in optima(plan):
        column = data.draw(st.integers(0, len(program.columns) - 1))
        this = (np.arange(len(program.columns)) == column).astype(np.float64)
        for figure in (program.columns.width[column] + FAULT, -FAULT):
            seats = known.seats + (figure - known.seats[column]) * this
            assert any("a column's bounds" in why for why in rejected(program, seats, known.prices))
        tighter = replace(program, capacity=program.load(known.seats) - FAULT)
        assert any("a leg's seats" in why for why in rejected(tighter, known.seats, known.prices))


@given(plan=ANY, data=st.data())
@examples(60)
def test_negative_missing_and_endless_figures_are_rejected(plan: Plan, data: st.DataObject) -> None:
    for program, known in optima(plan):
        leg = data.draw(st.integers(0, len(program.capacity) - 1))
        column = data.draw(st.integers(0, len(program.columns) - 1))
        for figure in (np.nan, np.inf, -np.inf):
            prices, seats = known.prices.copy(), known.seats.copy()
            prices[leg], seats[column] = figure, figure
            with np.errstate(invalid="ignore"):
                rejected(program, seats, known.prices)
                if program.capacity[leg] > 0 or figure != np.inf:
                    rejected(program, known.seats, prices)
        prices = known.prices.copy()
        prices[leg] = -FAULT * program.columns.scale
        assert any("negative" in why for why in rejected(program, known.seats, prices))


def test_a_closed_leg_may_cost_anything() -> None:
    # An endless price of a leg without seats is an optimal dual in the limit, and a large one is one.
    program = programs(Plan((0,), ((0,),), (((100.0, 2.0, 2.0),),)).network())["probabilistic"]
    assert certify(program, np.zeros(len(program.columns)), np.array([1e9])).holds
    assert not certify(program, np.zeros(len(program.columns)), np.array([99.0 * 0.5])).holds


@given(plan=ANY)
@examples(60)
def test_doing_nothing_is_rejected_where_anything_can_be_earned(plan: Plan) -> None:
    for program, known in optima(plan):
        assume(known.value > 1e-6)
        for prices in (known.prices, np.zeros(len(known.prices))):
            rejected(program, np.zeros(len(program.columns)), prices)


def test_figures_by_hand() -> None:
    # Two seats; three passengers at 100 and one at 40 would come. Selling one of each at a price of 70:
    # 140 earned; at most 2 * 70 + 3 * 30 = 230 can be; the unsold hundreds are worth 30 more than their seat, the
    # forty is worth 30 less than the seat it has; no seat is left.
    plan = sure_plan([2], [([0], 100.0, 3), ([0], 40.0, 1)])
    program = SeatProgram.of(plan.network(), deterministic_columns(plan.network()))
    found = certify(program, np.array([1.0, 1.0]), np.array([70.0]))
    assert (found.primal, found.dual, found.gap) == (140.0, 230.0, 90 / 230)
    assert (found.capacity_violation, found.bound_violation, found.price_violation, found.slackness) == (0, 0, 0, 0)
    assert found.reduced_cost_violation == pytest.approx(0.3)
    spare = certify(program, np.array([1.0, 0.0]), np.array([100.0]))
    assert spare.slackness == pytest.approx(100 / 200)
    assert certify(program, np.array([2.0, 0.0]), np.array([100.0])).holds


def test_shapes_must_fit() -> None:
    program = programs(Plan((2,), ((0,),), (((100.0, 2.0, 2.0),),)).network())["deterministic"]
    for seats, prices in ((np.zeros(2), np.zeros(1)), (np.zeros(1), np.zeros(2)), (np.zeros(1), np.zeros(()))):
        with pytest.raises(ValueError, match="must fit"):
            certify(program, seats, prices)


@pytest.mark.parametrize(
    ("figure", "limit"),
    [
        ("gap", 1e-7),
        ("capacity_violation", 1e-6),
        ("bound_violation", 1e-6),
        ("price_violation", 1e-6),
        ("reduced_cost_violation", 1e-6),
        ("slackness", 1e-6),
    ],
)
def test_each_figure_alone_can_fail(figure: str, limit: float) -> None:
    plan = sure_plan([2], [([0], 100.0, 3)])
    program = SeatProgram.of(plan.network(), deterministic_columns(plan.network()))
    good = certify(program, np.array([2.0]), np.array([100.0]))
    assert good.holds
    assert replace(good, **{figure: 0.9 * limit}).holds
    for bad in (1.1 * limit, np.inf, np.nan):
        assert len(replace(good, **{figure: bad}).failures) == 1
    if figure == "gap":
        assert not replace(good, gap=-1.1 * limit).holds
