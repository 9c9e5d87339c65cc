"""Whatever a solver does, there is either the right number or an error that names the cause."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pulp
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lp import SOLVERS, LpOptions, Method, SeatProgram, SolverOptions, canonical_prices, deterministic_columns, solve
from lp.solvers import OpenProgram, SolverName, solve_open
from network import NotCertifiedError, SolveError, SolverMissingError, SolverStoppedError
from tests.networks import Plan, degenerate_plans, examples, hub_plan, one_leg, plans, sure_plan

LEG = one_leg(3, [(100.0, 2.0, 1.5), (60.0, 4.0, 2.0)])


def one_column(width: float, sign: float, capacity: float) -> OpenProgram:
    one = np.array([1.0])
    return OpenProgram(one, width * one, np.array([0, 1]), np.array([0]), sign * one, capacity * one)


@pytest.mark.parametrize("name", SOLVERS)
def test_programs_without_an_optimum_are_told_apart(name: SolverName) -> None:
    with pytest.raises(SolverStoppedError, match=f"{name} ended as infeasible"):
        solve_open(one_column(2.0, 1.0, -1.0), SolverOptions(name))
    with pytest.raises(SolverStoppedError, match=f"{name} ended as (unbounded|infeasible)"):
        solve_open(one_column(np.inf, -1.0, 0.0), SolverOptions(name))
    seats, prices = solve_open(one_column(2.0, 1.0, 1.0), SolverOptions(name))
    assert (seats.tolist(), prices.tolist()) == ([1.0], [1.0])


@pytest.mark.parametrize("method", list(Method))
@pytest.mark.parametrize("name", SOLVERS)
def test_a_time_limit_gives_an_error_or_the_optimum_in_time(name: SolverName, method: Method) -> None:
    # CBC looks at its clock now and then, so that a small program may be solved before it does.
    network = hub_plan(1, spokes=4).network()
    try:
        hurried = solve(network, LpOptions(method, SolverOptions(name, 1e-9)))
    except SolverStoppedError as error:
        assert re.search(rf"{name} .*the time limit was 1e-09 s.*allow more time", str(error))
        assert (error.exit_code, error.http_status) == (3, 503)
    else:
        assert hurried.certificate.holds
        assert hurried.objective == pytest.approx(solve(network, LpOptions(method)).objective)


def test_a_time_limit_that_cannot_be_kept_is_named() -> None:
    network = hub_plan(1, spokes=16, seats=120).network()
    with pytest.raises(SolverStoppedError, match=r"highs .*the time limit was 1e-09 s.*allow more time"):
        solve(network, LpOptions(solver=SolverOptions("highs", 1e-9), whole=True))


def test_a_solver_that_is_not_there_is_named(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(pulp.PULP_CBC_CMD, "pulp_cbc_path", "/nowhere/cbc")
    with pytest.raises(SolverMissingError, match="solver cbc cannot be started"):
        solve(LEG.network())
    monkeypatch.setattr(pulp.HiGHS, "available", lambda self: False)
    with pytest.raises(SolverMissingError, match="solver highs cannot be started"):
        solve(LEG.network(), LpOptions(solver=SolverOptions("highs")))


ENDINGS = {
    "fails": "exit 3",
    "is killed": "kill -9 $$",
    "writes nothing": "exit 0",
    "writes an empty file": ': > "$file"',
    "writes nonsense": 'echo "Optimal - objective value -1" > "$file"; echo "  0 X0000000 many 0" >> "$file"',
    "breaks off a line": 'echo "Optimal - objective value -1" > "$file"; echo "  0 X0000000" >> "$file"',
    "says infeasible": 'echo "Infeasible - objective value 0" > "$file"',
    "stops on time": 'echo "Stopped on time - objective value -1" > "$file"',
    "says a word unheard of": 'echo "Splendid - objective value -1" > "$file"',
}


@pytest.mark.parametrize("ending", ENDINGS)
def test_a_solver_that_dies_is_an_error_that_names_it(
    ending: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(pulp.PULP_CBC_CMD, "pulp_cbc_path", imitation(tmp_path, ENDINGS[ending]))
    with pytest.raises(SolverStoppedError, match=r"^cbc .*try the other solver$"):
        solve(LEG.network())


def test_a_solver_that_claims_an_optimum_and_gives_no_figures_is_not_believed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    script = imitation(tmp_path, 'echo "Optimal - objective value -1" > "$file"')
    monkeypatch.setattr(pulp.PULP_CBC_CMD, "pulp_cbc_path", script)
    with pytest.raises(NotCertifiedError, match="relative gap"):
        solve(LEG.network())


def imitation(folder: Path, ending: str) -> str:
    """A program that takes the arguments of CBC, the last of which is its solution file."""
    script = folder / "cbc"
    script.write_text(f"#!/bin/sh\nfor file; do :; done\n{ending}\n")
    script.chmod(0o755)
    return str(script)


@pytest.mark.parametrize("error", [pulp.PulpSolverError("no licence\nfor you"), OSError(), IndexError(), MemoryError()])
def test_an_adapter_that_breaks_is_an_error_of_one_line(error: Exception, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(self: pulp.HiGHS, problem: pulp.LpProblem) -> int:
        raise error

    monkeypatch.setattr(pulp.HiGHS, "actualSolve", broken)
    with pytest.raises(SolverStoppedError, match=r"^highs failed: (no licence|[A-Za-z]+Error); try") as caught:
        solve(LEG.network(), LpOptions(solver=SolverOptions("highs")))
    assert "\n" not in str(caught.value)


def change_seats(change: Callable[[float, float], float | None]) -> Callable[[pulp.LpProblem], None]:
    """A lie about every column: from its true seats and its width, 9 where that is endless."""

    def lie(problem: pulp.LpProblem) -> None:
        for variable in problem.variables():
            width = 9.0 if variable.upBound is None else variable.upBound
            variable.varValue = change(variable.varValue, width)

    return lie


SEAT_LIES = {
    "nothing is sold": change_seats(lambda seats, width: 0.0),
    "everything is sold": change_seats(lambda seats, width: width),
    "sold and unsold are swapped": change_seats(lambda seats, width: width - seats),
    "everything is half sold": change_seats(lambda seats, width: width / 2),
    "a little less is sold": change_seats(lambda seats, width: seats * 0.999),
    "seats are negative": change_seats(lambda seats, width: -seats),
    "seats are endless": change_seats(lambda seats, width: np.inf),
    "figures are missing": change_seats(lambda seats, width: None),
    "figures are not numbers": change_seats(lambda seats, width: np.nan),
}


def change_prices(change: Callable[[float], float | None]) -> Callable[[pulp.LpProblem], None]:
    def lie(problem: pulp.LpProblem) -> None:
        for row in problem.constraints.values():
            row.pi = change(row.pi)

    return lie


PRICE_LIES = {
    "prices have the other sign": change_prices(lambda price: -price),
    "prices are nothing": change_prices(lambda price: 0.0),
    "prices are enormous": change_prices(lambda price: -1e9),
    "prices are missing": change_prices(lambda price: None),
    "prices are not numbers": change_prices(lambda price: np.nan),
}


def tell(lie: Callable[[pulp.LpProblem], None], patch: pytest.MonkeyPatch) -> None:
    """Make HiGHS solve truly, report an optimum and tell a lie about it."""
    solve_truly = pulp.HiGHS.actualSolve

    def lying(self: pulp.HiGHS, problem: pulp.LpProblem) -> int:
        status: int = solve_truly(self, problem)
        lie(problem)
        return status

    patch.setattr(pulp.HiGHS, "actualSolve", lying)


@pytest.mark.parametrize("method", [Method.DETERMINISTIC, Method.PROBABILISTIC])
@pytest.mark.parametrize("lie", SEAT_LIES)
def test_a_solver_that_lies_about_seats_is_found_out(lie: str, method: Method, monkeypatch: pytest.MonkeyPatch) -> None:
    tell(SEAT_LIES[lie], monkeypatch)
    for plan in (LEG, hub_plan(2, spokes=4)):
        with pytest.raises((NotCertifiedError, SolverStoppedError)):
            solve(plan.network(), LpOptions(method, SolverOptions("highs"), whole=True))


@given(plan=st.one_of(plans(), degenerate_plans()), lie=st.sampled_from(sorted(SEAT_LIES | PRICE_LIES)))
@examples(100)
def test_no_lie_ever_changes_a_number(plan: Plan, lie: str) -> None:
    network = plan.network()
    for method in (Method.DETERMINISTIC, Method.PROBABILISTIC):
        true = solve(network, LpOptions(method))
        with pytest.MonkeyPatch.context() as patch:
            tell((SEAT_LIES | PRICE_LIES)[lie], patch)
            patch.setattr("lp.pricing_out.WHOLE", 0)
            try:
                found = solve(network, LpOptions(method, SolverOptions("highs")))
            except SolveError:
                continue
        assert found.objective == pytest.approx(true.objective, rel=1e-6, abs=1e-6)
        near = 1e-5 * network.fare.max(initial=1.0)
        np.testing.assert_allclose(found.bid_price, true.bid_price, rtol=0, atol=near)


def test_prices_that_press_on_their_fences_for_ever_are_given_up(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("lp.pricing_out.MOST_ROUNDS", 1)
    with pytest.raises(SolverStoppedError, match="press on their fences after 1 rounds"):
        solve(hub_plan(1).network(), start=np.full(10, 1e6))


def test_seats_that_no_price_supports_are_no_optimum() -> None:
    # By hand: the through passenger pays 100, the locals displaced 80 each, so no p >= (80, 80) has p + q <= 100.
    network = sure_plan([1, 1], [([0, 1], 100.0, 1), ([0], 80.0, 1), ([1], 80.0, 1)]).network()
    program = SeatProgram.of(network, deterministic_columns(network))
    with pytest.raises(SolverStoppedError, match="no price fits the optimum"):
        canonical_prices(program, np.array([1.0, 0.0, 0.0]))
    last_seat, next_seat = canonical_prices(program, np.array([0.0, 1.0, 1.0]))
    np.testing.assert_allclose(last_seat, [80.0, 80.0], rtol=1e-9)
    np.testing.assert_allclose(next_seat, [50.0, 50.0], rtol=1e-9)
