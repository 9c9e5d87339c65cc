"""The certificate: is this an optimum? Told from primal and dual alone, over all columns.

Nothing here relies on how the solution was found. For seats x and prices p of the program of
`lp.columns`, weak duality says that no solution earns more than::

    sum_l c_l p_l + sum_k w_k max(0, v_k - price of the path of k)

so if x keeps every capacity and bound, p >= 0, and the revenue of x reaches that figure, x is optimal and
p is an optimal dual.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass

import numpy as np

from lp.problem import SeatProgram
from network.arrays import FloatArray
from network.errors import NotCertifiedError

__all__ = ["Certificate", "certify"]

GREATEST_GAP = 1e-7
GREATEST_VIOLATION = 1e-6


@dataclass(frozen=True)
class Certificate:
    """What was found.

    Attributes
    ----------
    primal, dual
        Revenue of the solution and the bound that the prices prove, currency.
    gap
        (dual - primal) / max(1 cent of scale, |dual|), a share.
    capacity_violation, bound_violation
        Greatest excess over a leg's seats, and over a column's width or below zero, seats.
    price_violation
        Greatest price below zero, as a share of the scale of money.
    reduced_cost_violation
        Greatest reduced cost of the wrong sign for where its column stands, as a share of the scale of
        money: an unsold column worth more than its path, a sold one worth less.
    slackness
        Seats left on a leg times its price, summed, as a share of the dual bound.
    columns
        Number of columns looked at: all of them.
    """

    primal: float
    dual: float
    gap: float
    capacity_violation: float
    bound_violation: float
    price_violation: float
    reduced_cost_violation: float
    slackness: float
    columns: int

    @property
    def holds(self) -> bool:
        """True if the optimum is proved within the limits; NaN never is."""
        return not self.failures

    @property
    def failures(self) -> tuple[str, ...]:
        """The limits that are broken, in words."""
        found = []
        if not abs(self.gap) <= GREATEST_GAP:
            found.append(f"relative gap {self.gap:.3g} exceeds {GREATEST_GAP:g}")
        for label, value in (("a leg's seats", self.capacity_violation), ("a column's bounds", self.bound_violation)):
            if not value <= GREATEST_VIOLATION:
                found.append(f"{label} are exceeded by {value:.3g} seats")
        for label, value in (
            ("a price is negative", self.price_violation),
            ("a reduced cost has the wrong sign", self.reduced_cost_violation),
            ("a leg with seats to spare has a price", self.slackness),
        ):
            if not value <= GREATEST_VIOLATION:
                found.append(f"{label} (by {value:.3g} of the scale of money)")
        return tuple(found)

    def require(self) -> None:
        """Raise `NotCertifiedError` unless the certificate holds."""
        if not self.holds:
            raise NotCertifiedError(
                f"the optimum is not certified: {'; '.join(self.failures)}; nothing is published, try the other solver"
            )

    def as_dict(self) -> dict[str, float | int | bool]:
        """All figures and the verdict, for a summary."""
        return {**asdict(self), "holds": self.holds}


def certify(program: SeatProgram, seats: FloatArray, prices: FloatArray) -> Certificate:
    """Check seats per column, (K,), and prices per leg, (L,), against the whole program.

    Raises
    ------
    ValueError
        If a shape does not fit the program.
    """
    columns = program.columns
    if seats.shape != (len(columns),) or prices.shape != program.capacity.shape:
        raise ValueError("seats and prices must fit the columns and legs of the program")
    reduced = columns.value - program.path_price(prices)[columns.itinerary]
    room = columns.width - seats
    spare = program.capacity - program.load(seats)
    unsold_worth = float(np.max(reduced, initial=0.0, where=room > GREATEST_VIOLATION))
    sold_unworthy = -float(np.min(reduced, initial=0.0, where=seats > GREATEST_VIOLATION))
    # Summed in pairs rather than by BLAS: sharper, and the same whatever the number of threads.
    primal = float(np.sum(columns.value * seats))
    surplus = np.sum(columns.width * np.maximum(reduced, 0.0, out=reduced))
    dual = float(np.sum(program.capacity * prices) + surplus)
    size = max(abs(dual), 0.01 * program.scale)
    return Certificate(
        primal=primal,
        dual=dual,
        gap=(dual - primal) / size,
        capacity_violation=_excess(-spare),
        bound_violation=max(-float(np.min(seats, initial=0.0)), -float(np.min(room, initial=0.0))),
        price_violation=_excess(-prices) / program.scale,
        reduced_cost_violation=max(unsold_worth, sold_unworthy) / program.scale,
        slackness=float(np.abs(np.maximum(spare, 0.0) * prices).sum()) / size,
        columns=len(columns),
    )


def _excess(values: FloatArray) -> float:
    """Greatest value above zero, NaN if there is one."""
    return float(np.max(values, initial=0.0))
