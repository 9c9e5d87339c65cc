"""The control methods that a simulation plays, one small class each.

A method makes a rule from a network as it stands: the seats left and the demand still to come. To add one, write a
class with ``prepare`` and put it into `METHODS`. A method whose rule depends on the seats left beyond looking its
answers up by them says so with ``by_seats``: re-optimising it takes a rule for every path.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass

import numpy as np

from heuristics import LegControl, LegProtection, leg_products, leg_protection
from heuristics.arrivals import ArrivalPlan
from heuristics.dynamic import price_curves
from heuristics.protection import seat_values
from legworth.control import EQUAL
from legworth.curves import CurveMethod, network_curves
from legworth.simulation.rules import CLOSED, PriceRule, Rule, SeatRule, SeatTable, Situation
from lp import LpOptions, SolverOptions, solve
from lp import Method as Program
from network import Network
from network.arrays import FloatArray, IntArray

__all__ = ["LEG_LEVEL", "METHODS", "Method"]

FAST = SolverOptions("highs")


class Method(ABC):
    """One control method."""

    by_seats = False

    @abstractmethod
    def prepare(self, network: Network, situation: Situation) -> Rule:
        """Make its rule.

        Parameters
        ----------
        network
            Seats left, demand to come and instant.
        situation
            Paths of products, and the most seats that legs may ever have left.
        """

    @property
    @abstractmethod
    def label(self) -> str:
        """What it is, in a few words."""


@dataclass(frozen=True)
class FirstCome(Method):
    """First come, first served."""

    label = "first come, first served"

    def prepare(self, network: Network, situation: Situation) -> Rule:
        return SeatRule(np.ones((1, *situation.legs.shape)))


@dataclass(frozen=True)
class LegLevel(Method):
    """EMSR-b on full fares, every leg by itself."""

    label = "leg-level EMSR-b on full fares"

    def prepare(self, network: Network, situation: Situation) -> Rule:
        return _protected(network, situation, np.zeros(network.n_legs), LegControl())


@dataclass(frozen=True)
class AdjustedProtection(Method):
    """EMSR-b over fares less the bid prices of the other legs.

    Attributes
    ----------
    program
        Linear program that gives the bid prices.
    classes
        Virtual classes a leg, or None to rank every product by itself.
    """

    program: Program = Program.DETERMINISTIC
    classes: int | None = None
    by_seats = True

    @property
    def label(self) -> str:
        how = "by product" if self.classes is None else f"in {self.classes} virtual classes"
        return f"displacement-adjusted EMSR-b {how}"

    def prepare(self, network: Network, situation: Situation) -> Rule:
        prices = bid_prices(network, self.program)
        return _protected(network, situation, prices, LegControl(virtual_classes=self.classes))


@dataclass(frozen=True)
class BidPrices(Method):
    """A fare must reach the sum of the bid prices of its legs.

    Attributes
    ----------
    program
        Linear program that gives them.
    """

    program: Program
    by_seats = True

    @property
    def label(self) -> str:
        return f"{self.program} bid prices"

    def prepare(self, network: Network, situation: Situation) -> Rule:
        prices = bid_prices(network, self.program)
        open_to = network.fare * (1 + EQUAL) >= network.displacement(prices)
        need = np.where(np.append(open_to, False)[:, None], 1, CLOSED)
        start = np.append(0, np.cumsum(situation.seats))
        table = SeatTable.constant(start, np.repeat(prices, situation.seats))
        return SeatRule(np.broadcast_to(need, (1, *situation.legs.shape)), table)


@dataclass(frozen=True)
class Curves(Method):
    """Price curves of the leg dynamic programs, by seats left and days before departure.

    They are those that `legworth price --curves` publishes; between the days published they go in straight lines.

    Attributes
    ----------
    kind
        Where the displacement terms come from.
    """

    kind: CurveMethod = CurveMethod.DECOMPOSITION
    by_seats = True

    @property
    def label(self) -> str:
        return f"price curves, {'decomposition' if self.kind is CurveMethod.DECOMPOSITION else 'fare splits'}"

    def prepare(self, network: Network, situation: Situation) -> Rule:
        prices = bid_prices(network, Program.DETERMINISTIC)
        if self.kind is CurveMethod.FARE_SPLITS:
            ((_, curves),) = network_curves(network, prices, self.kind).parts
            return PriceRule([SeatTable.of_curves(curves)])
        plan = ArrivalPlan.of(network, leg_products(network, prices))
        return PriceRule([SeatTable.of_curves(price_curves(plan, network.remaining))])


METHODS: dict[str, Method] = {
    "first-come": FirstCome(),
    "leg": LegLevel(),
    "adjusted": AdjustedProtection(),
    "virtual": AdjustedProtection(classes=8),
    "deterministic": BidPrices(Program.DETERMINISTIC),
    "probabilistic": BidPrices(Program.PROBABILISTIC),
    "randomised": BidPrices(Program.RANDOMISED),
    "curves": Curves(),
    "fare-splits": Curves(CurveMethod.FARE_SPLITS),
}
"""All methods by the names under which they are asked for."""

LEG_LEVEL = "leg"
"""The method with which all others are compared."""


def bid_prices(network: Network, program: Program) -> FloatArray:
    """Certified bid prices of a network, (L,), currency."""
    solver = SolverOptions() if program is Program.PROBABILISTIC else FAST
    return solve(network, LpOptions(program, solver)).bid_price


def _protected(network: Network, situation: Situation, prices: FloatArray, options: LegControl) -> SeatRule:
    """Seats that products need under EMSR-b over fares adjusted by some prices, (L,).

    Nothing is kept for a product that another leg of its path, without seats, makes unsellable, as in
    `legworth.control`. Levels are made for all seats that a leg may ever have, and so hold however many are left.
    """
    products = leg_products(network, prices)
    closed = (network.remaining == 0).astype(np.float64)
    elsewhere = network.displacement(closed)[products.product] - closed[products.leg]
    protection = leg_protection(products, network.demand, situation.seats, options, elsewhere == 0)
    need = np.full(situation.legs.shape, 1)
    place = np.argmax(situation.legs[products.product] == products.leg[:, None], axis=1)
    need[products.product, place] = _needed(protection)
    need[-1] = CLOSED
    start = np.append(0, np.cumsum(situation.seats))
    leg = np.repeat(np.arange(network.n_legs), situation.seats)
    value = seat_values(protection.joint, leg, np.arange(len(leg)) - start[leg] + 1)
    return SeatRule(need[None], SeatTable.constant(start, value))


def _needed(protection: LegProtection) -> IntArray:
    """Seats that must be left on the leg for every row, (P,): those kept for better steps, and its own."""
    joint, ladder = protection.joint, protection.joint.ladder
    above = np.append(0.0, joint.seats)[:-1]
    above[ladder.leg_start[:-1][np.diff(ladder.leg_start) > 0]] = 0.0
    needed = np.full(len(protection.step), CLOSED, dtype=np.int64)
    held = protection.step >= 0
    needed[held] = above[protection.step[held]].astype(np.int64) + 1
    return needed
