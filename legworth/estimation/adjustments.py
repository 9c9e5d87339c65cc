"""Adjustments: what people know that history does not, applied on top of the estimate and told in every output.

Rows are applied in the order of the table, each to what those before it made: factors on the same product multiply, and
a value takes the place of what stands before it and is scaled by the factors after it. A row whose ``until`` is not
after the snapshot has expired and changes nothing.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np

from legworth.simulation.forecast import demand_times
from network import Demand
from network.arrays import BoolArray, NameArray

__all__ = ["Adjusted", "Adjustment", "apply_adjustments"]


@dataclass(frozen=True)
class Adjustment:
    """One row of the table, and what it did.

    Attributes
    ----------
    adjustment, who, when, why, until
        As the table says; instants in ISO 8601.
    scope
        Its conditions that are not blank.
    factor, value
        As the table says; one of them is None.
    expired
        Whether it no longer holds at the snapshot.
    products
        Products that it holds for.
    shared
        Products of them that an earlier row of the table had changed already.
    before, after
        Passengers to come over these products before and after it.
    """

    adjustment: str
    scope: dict[str, str]
    factor: float | None
    value: float | None
    who: str
    when: str
    why: str
    until: str | None
    expired: bool
    products: int = 0
    shared: int = 0
    before: float = 0.0
    after: float = 0.0

    def as_dict(self) -> dict[str, Any]:
        """Plain record for a document."""
        return asdict(self)


@dataclass(frozen=True, eq=False)
class Adjusted:
    """Demand to come with adjustments.

    Attributes
    ----------
    demand
        (J,) demand.
    log
        Every row, with what it did.
    applied
        (J,) for every row, the products that it changed.
    """

    demand: Demand
    log: tuple[Adjustment, ...]
    applied: tuple[BoolArray, ...]

    @property
    def changed(self) -> BoolArray:
        """(J,) whether any adjustment changed a product."""
        return np.asarray(np.any([np.zeros(len(self.demand), dtype=bool), *self.applied], axis=0))

    @property
    def names(self) -> NameArray:
        """(J,) names of the adjustments that changed a product, in order, with semicolons between; None for none."""
        found = np.full(len(self.demand), None, dtype=object)
        named = np.zeros(len(self.demand), dtype=bool)
        for row, changed in zip(self.log, self.applied, strict=True):
            found[changed & ~named] = row.adjustment
            found[changed & named] += f"; {row.adjustment}"
            named |= changed
        return found


def apply_adjustments(
    demand: Demand, rows: Sequence[Adjustment], scopes: Sequence[BoolArray], departure: np.ndarray
) -> Adjusted:
    """Apply adjustments to demand to come, one after the other.

    Parameters
    ----------
    demand
        (J,) estimated demand.
    rows, scopes
        From `legworth.estimation.adjustments_table.read_adjustments`.
    departure
        (J,) dates of departure, for values.

    Notes
    -----
    A factor leaves the variation of the rate as it is: below one it keeps each passenger with that chance, above one
    the same rate is carried on (`legworth.simulation.forecast.demand_times`). Where a value calls for passengers where
    none were expected at all, they come as Poisson demand.
    """
    so_far, log, applied = np.zeros(len(demand), dtype=bool), [], []
    for row, scope in zip(rows, scopes, strict=True):
        changed = np.zeros(len(demand), dtype=bool) if row.expired else scope
        at = np.flatnonzero(changed)
        before, shared = float(demand.mean[at].sum()), int(so_far[at].sum())
        demand = _changed(demand, at, row, departure)
        so_far = so_far | changed
        after = float(demand.mean[at].sum())
        log.append(replace(row, products=int(scope.sum()), shared=shared, before=before, after=after))
        applied.append(changed)
    return Adjusted(demand, tuple(log), tuple(applied))


def _changed(demand: Demand, at: np.ndarray, row: Adjustment, departure: np.ndarray) -> Demand:
    mean = demand.mean[at]
    fresh = np.zeros(len(at))
    if row.factor is not None:
        factor = np.full(len(at), row.factor)
    else:
        wanted = float(row.value or 0.0)
        _, date = np.unique(departure[at], return_inverse=True)
        total, number = np.bincount(date, mean)[date], np.bincount(date)[date]
        factor = np.divide(wanted, total, out=np.zeros(len(at)), where=total > 0)
        fresh = np.where(total > 0, 0.0, wanted / number)
    scaled = demand_times(demand.take(at), factor)
    means, deviations = demand.mean.copy(), demand.deviation.copy()
    means[at] = scaled.mean + fresh
    deviations[at] = np.where(fresh > 0, np.sqrt(fresh), scaled.deviation)
    family = demand.family.copy()
    family[at] = Demand.of(means[at], deviations[at]).family
    return Demand(means, deviations, family)
