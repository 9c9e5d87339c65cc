"""Both controls side by side: what each product and each leg is worth, and where they disagree."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from heuristics import LegControl, LegProtection, leg_products, leg_protection
from network import Network
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["EQUAL", "Connections", "ControlComparison", "compare_controls", "leg_control"]


EQUAL = 1e-9
"""Share of the money asked within which it counts as equal to the price of the seats."""


@dataclass(frozen=True, eq=False)
class Connections:
    """Every product under both controls, (J,) each.

    Attributes
    ----------
    displacement, contribution
        Sum of the bid prices of the path, and the fare less that sum, currency.
    open, open_by_leg_control
        Whether network control and leg-level control sell it.
    at_stake
        Money that hangs on a disagreement, currency, 0 where there is none. To first order: the contribution
        that one control gives away per passenger, times the passengers expected within the seats that the
        control which sells the product has for it.
    """

    displacement: FloatArray
    contribution: FloatArray
    open: BoolArray
    open_by_leg_control: BoolArray
    at_stake: FloatArray

    @property
    def disagrees(self) -> BoolArray:
        """(J,) whether exactly one of the controls sells the product."""
        return np.not_equal(self.open, self.open_by_leg_control)


@dataclass(frozen=True, eq=False)
class ControlComparison:
    """Network control against leg-level control.

    Attributes
    ----------
    adjusted, plain
        EMSR-b over displacement-adjusted fares, and over full fares as if every leg stood alone.
    connections
        Every product.
    agrees
        (L,) whether both controls sell the same products of the leg.
    """

    adjusted: LegProtection
    plain: LegProtection
    connections: Connections
    agrees: BoolArray


def compare_controls(network: Network, bid_prices: FloatArray, options: LegControl | None = None) -> ControlComparison:
    """Hold network control by bid prices, (L,), against leg-level control by EMSR-b.

    Network control sells a product if seats remain on its whole path and its fare reaches the sum of the bid
    prices. Leg-level control sells it if every leg, on full fares and by itself, has a seat for it.
    """
    options = options or LegControl()
    adjusted = leg_control(network, bid_prices, options)
    plain = leg_control(network, np.zeros(network.n_legs), options)
    displacement = network.displacement(bid_prices)
    contribution = network.fare - displacement
    contribution = np.where(np.abs(contribution) <= EQUAL * network.fare, 0.0, contribution)
    seats = network.path_remaining[network.product_itinerary]
    opened = (contribution >= 0) & (seats > 0)
    limit = _path_limit(network, plain)
    opened_by_leg = limit > 0
    within = np.where(opened, seats, limit)
    lost = np.where(opened != opened_by_leg, np.abs(contribution), 0.0)
    some = np.flatnonzero(lost > 0)
    at_stake = lost
    at_stake[some] *= network.demand.take(some).expected_sales(within[some])
    connections = Connections(displacement, contribution, opened, opened_by_leg, at_stake)
    disagreements = network.leg_load(connections.disagrees.astype(np.float64))
    return ControlComparison(adjusted, plain, connections, disagreements == 0)


def leg_control(network: Network, bid_prices: FloatArray, options: LegControl | None = None) -> LegProtection:
    """Protect seats on every leg over fares displaced by bid prices, (L,); zeros give leg-level control.

    Nothing is kept for a product that another leg of its path, without seats, makes unsellable.
    """
    products = leg_products(network, bid_prices)
    closed = (network.remaining == 0).astype(np.float64)
    elsewhere = network.displacement(closed)[products.product] - closed[products.leg]
    return leg_protection(products, network.demand, network.remaining, options, elsewhere == 0)


def _path_limit(network: Network, protection: LegProtection) -> IntArray:
    """(J,) seats that leg-level control has for every product: the least booking limit along its path."""
    limit = np.full(network.n_products, np.iinfo(np.int64).max)
    np.minimum.at(limit, protection.products.product, protection.booking_limit)
    return limit
