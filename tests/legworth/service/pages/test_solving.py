"""Solves on request are worked on once, and too many are turned away."""

from __future__ import annotations

import threading

import pytest

from legworth.service.pages.solving import MOST_WAITING, Solver, SolvesWaitError


def test_solver_answers_a_question_once_and_turns_too_many_away() -> None:
    go, solver, worked = threading.Event(), Solver(), []

    def work() -> int:
        assert go.wait(30)
        worked.append(1)
        return len(worked)

    first = solver.ask("a", work)
    assert solver.ask("a", work) is first
    others = [solver.ask(number, work) for number in range(MOST_WAITING - 1)]
    with pytest.raises(SolvesWaitError):
        solver.ask("one more", work)
    go.set()
    assert [each.result(30) for each in (first, *others)] == list(range(1, MOST_WAITING + 1))
    assert solver.ask("a", work) is first
    assert solver.ask("one more", work).result(30) == MOST_WAITING + 1
    solver.close()
    with pytest.raises(RuntimeError):
        solver.ask("after the end", work)
