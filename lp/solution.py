"""What a solve is asked for and what it gives: options, status-free results, certificates."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum

from lp.certificate import Certificate
from lp.columns import TAIL
from lp.solvers import SolverOptions
from network.arrays import FloatArray
from network.errors import SettingError

__all__ = ["LpOptions", "Method", "Solution"]


class Method(StrEnum):
    """The linear programs offered."""

    DETERMINISTIC = "deterministic"
    PROBABILISTIC = "probabilistic"
    RANDOMISED = "randomised"


@dataclass(frozen=True)
class LpOptions:
    """How to turn demand to come into bid prices.

    Attributes
    ----------
    method
        Which program.
    solver
        Which solver, and its time limit.
    tail
        Probability below which a seat gets no column (probabilistic program).
    samples, seed
        Outcomes of demand drawn, and the seed of the draw (randomised program).
    whole
        Give the solver every column at once, as a reference.
    """

    method: Method = Method.PROBABILISTIC
    solver: SolverOptions = field(default_factory=SolverOptions)
    tail: float = TAIL
    samples: int = 30
    seed: int = 1
    whole: bool = False

    def __post_init__(self) -> None:
        if self.method not in list(Method):
            raise SettingError(f"unknown method {self.method!r}; choose {', '.join(Method)}")
        object.__setattr__(self, "method", Method(self.method))
        if not 0 < self.tail < 1:
            raise SettingError(f"tail {self.tail} is not a probability between 0 and 1")
        if self.samples < 2:
            raise SettingError(f"{self.samples} samples are too few to tell an error from; take at least 2")


@dataclass(frozen=True, eq=False)
class Solution:
    """A certified optimum; nothing else is ever returned.

    Attributes
    ----------
    method, solver
        The program, and the solver with its version.
    objective, bound
        Revenue of the optimum and the bound that its prices prove, currency; means over the samples of the
        randomised program.
    objective_error
        Standard error of the objective of the randomised program, 0 otherwise.
    bid_price, next_seat
        (L,) value of the last and of the next seat, currency. On a leg without seats both are that of the next.
    allotted
        (J,) seats that the optimum sets aside for every product.
    sales
        (J,) passengers expected of every product within the seats set aside for it.
    expected_sales
        (L,) the same by leg.
    certificate
        That of the optimum with its last-seat prices; of the worst sample of the randomised program.
    columns, opened, rounds
        Columns of the program, columns the solver saw in its last call, and solver calls.
    seconds
        Time taken by phase, filled in by whoever holds a clock.
    """

    method: Method
    solver: str
    objective: float
    bound: float
    objective_error: float
    bid_price: FloatArray
    next_seat: FloatArray
    allotted: FloatArray
    sales: FloatArray
    expected_sales: FloatArray
    certificate: Certificate
    columns: int
    opened: int
    rounds: int
    seconds: dict[str, float] = field(default_factory=dict)
