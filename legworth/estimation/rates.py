"""Rates of products and shapes of booking curves together, seen through closed classes.

Demand of product p on a departure of effect e in cell i is Poisson of mean ``rate[p] e share[q, i] g``: q the curve
of the product and g the departure's own factor, gamma of mean 1 and variance a. Only what is open is seen. Given
rates and shapes, g has mean ``(1/a + n) / (1/a + m)`` with n passengers seen and m expected while open; given g,
shapes are passengers over what open cells would have brought. Rates solve ``sum (n - m) / (1 + a m) = 0``, the score
of the negative binomial likelihood. Both hold although classes close when departures are busy, as long as they close
because of what had been booked by then: the likelihood then needs no model of closing (D. B. Rubin (1976), Inference
and missing data, Biometrika 63, 581-592, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from legworth.estimation.closing import SeenDemand
from legworth.estimation.curves import Shapes, cell_sums, spread
from legworth.estimation.increments import Increments
from network.arrays import FloatArray, IntArray

__all__ = ["RateModel", "Sight", "by_cell", "fill", "fit_rates", "refit_rates", "settle", "sight"]

TOLERANCE = 1e-4
"""Rounds end when no share of a curve moves by more, nor the rates by more of themselves on average."""

ROUNDS = 60
"""Most rounds of one fit."""

_PRIOR = 1e-3


@dataclass(frozen=True, eq=False)
class RateModel:
    """Rates, shapes and what they are conditional on.

    Attributes
    ----------
    rate
        (P,) passengers of an average departure.
    curve
        (P,) curve of every product.
    fare_class
        (P,) class of every product.
    shapes
        The curves.
    dispersion
        (P,) variance a of the departure's own factor.
    prior
        (P,) rate that every product leans on, with the weight of ``_PRIOR`` departures; keeps rates above none.
    """

    rate: FloatArray
    curve: IntArray
    fare_class: IntArray
    shapes: Shapes
    dispersion: FloatArray
    prior: FloatArray

    @property
    def n_classes(self) -> int:
        """Number of classes K."""
        return int(self.fare_class.max()) + 1


@dataclass(frozen=True, eq=False)
class Sight:
    """What was seen of every series.

    Attributes
    ----------
    product, effect, weight
        (S,) product, factor of weekday and season, weight by age.
    seen
        Rows as evidence.
    came
        (S,) passengers seen while open.
    reach
        (S,) share of the curve that was open.
    """

    product: IntArray
    effect: FloatArray
    weight: FloatArray
    seen: SeenDemand
    came: FloatArray
    reach: FloatArray


def sight(
    increments: Increments,
    model: RateModel,
    product: IntArray,
    effect: FloatArray,
    weight: FloatArray,
    seen: SeenDemand,
) -> Sight:
    """Sum up rows by series under a model."""
    reach = model.shapes.reach(increments, model.curve[product][increments.owner])
    came, part = increments.per_series(seen.count), increments.per_series(reach * seen.part)
    return Sight(product, effect, weight, seen, came, part)


def refit_rates(model: RateModel, view: Sight, rounds: int = 20) -> RateModel:
    """Fit rates alone, given shapes and what was open."""
    n_products = len(model.rate)
    exposure, came = view.effect * view.reach, view.came
    spread_of = model.dispersion[view.product]
    rate = model.rate
    for _ in range(rounds):
        weight = view.weight / (1 + spread_of * rate[view.product] * exposure)
        seen = np.bincount(view.product, weight * came, minlength=n_products)
        expected = np.bincount(view.product, weight * exposure, minlength=n_products)
        before, rate = rate, (seen + _PRIOR * model.prior) / (expected + _PRIOR)
        if np.sum(np.abs(rate - before)) <= TOLERANCE / 10 * np.sum(rate):
            break
    return replace(model, rate=rate)


def own_factor(model: RateModel, view: Sight) -> FloatArray:
    """(S,) expected factor of every departure, given what was seen of it."""
    a, m = model.dispersion[view.product], model.rate[view.product] * view.effect * view.reach
    return np.asarray((1 + a * view.came) / (1 + a * m))


def fill(increments: Increments, model: RateModel, view: Sight) -> SeenDemand:
    """Fill in the edges of what was seen, as the model expects them."""
    at = view.seen.edge
    if not len(at):
        return view.seen
    base = own_factor(model, view) * model.rate[view.product] * view.effect
    owner = increments.owner[at]
    cumulative, curve = model.shapes.cumulative, model.curve[view.product[owner]]
    reach = cumulative[curve, increments.last[at] + 1] - cumulative[curve, increments.first[at]]
    return view.seen.expecting(increments, base[owner] * reach, model.fare_class[view.product[owner]])


def _shapes(increments: Increments, model: RateModel, view: Sight, curve: IntArray) -> Shapes:
    came, expected = by_cell(increments, model, view, curve, model.shapes.share)
    return Shapes.fitted(model.shapes.days, came, expected)


def by_cell(
    increments: Increments, model: RateModel, view: Sight, group: IntArray, share: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Passengers who came by group and cell, and those who would have, were the share of every cell 1.

    Parameters
    ----------
    increments, model, view
        Rows, model and what was seen.
    group
        (R,) group of every row.
    share
        (n_groups, M) shape by which rows of several cells are shared out.
    """
    n_groups = len(share)
    base = view.weight * own_factor(model, view) * model.rate[view.product] * view.effect
    cumulative = np.concatenate([np.zeros((n_groups, 1)), np.cumsum(share, axis=1)], axis=1)
    reach = cumulative[group, increments.last + 1] - cumulative[group, increments.first]
    weighed = view.weight[increments.owner] * view.seen.count
    came = cell_sums(increments, group, n_groups, share, reach, weighed)
    return came, spread(increments, group, n_groups, base[increments.owner] * view.seen.part)


def settle(increments: Increments, model: RateModel, view: Sight) -> tuple[RateModel, Sight]:
    """Fill in the edges and fit the rates, the curves as they are."""
    view = replace(view, seen=fill(increments, model, view))
    view = sight(increments, model, view.product, view.effect, view.weight, view.seen)
    return refit_rates(model, view), view


def fit_rates(increments: Increments, model: RateModel, view: Sight) -> tuple[RateModel, Sight, bool]:
    """Fit rates, shapes and the open parts of edges by turns.

    Parameters
    ----------
    increments
        Rows.
    model
        Where to begin; its dispersion and its choice of curves stay.
    view
        What was seen, as under this model.

    Returns
    -------
    model, view
        Fitted.
    converged
        False where `ROUNDS` was reached first.
    """
    curve = model.curve[view.product].astype(np.int16)[increments.owner]
    for _ in range(ROUNDS):
        before = model
        view = replace(view, seen=fill(increments, model, view))
        view = sight(increments, model, view.product, view.effect, view.weight, view.seen)
        model = refit_rates(model, view, rounds=3)
        model = replace(model, shapes=_shapes(increments, model, view, curve))
        moved = np.max(np.abs(model.shapes.share - before.shapes.share), initial=0.0)
        drift = np.sum(np.abs(model.rate - before.rate)) / max(np.sum(model.rate), 1e-300)
        if moved <= TOLERANCE and drift <= 10 * TOLERANCE:
            return model, view, True
    return model, view, False
