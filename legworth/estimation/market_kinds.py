"""Two kinds of market: city pairs that book early and city pairs that book late, if history tells them apart.

Products of one class need not share one booking curve: a working journey is booked later than a holiday. City pairs
are split in two by the likelihood of their passengers over the cells, curves and membership by turns; the split is
kept where it passes the Bayesian information criterion (G. Schwarz (1978), Annals of Statistics 6, 461-464, from
memory).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from legworth.estimation.curves import Shapes
from legworth.estimation.increments import Increments
from legworth.estimation.pools import Pools
from legworth.estimation.rates import RateModel, Sight, by_cell
from network.arrays import FloatArray, IntArray

__all__ = ["ONE_KIND", "kinds_of_market"]

ONE_KIND = ("",)
TWO_KINDS = ("-early", "-late")

_TURNS = 30


def kinds_of_market(
    increments: Increments, model: RateModel, view: Sight, pools: Pools
) -> tuple[RateModel, tuple[str, ...]]:
    """Split city pairs into two kinds of booking curves, if that tells.

    Parameters
    ----------
    increments, model, view
        Rows, a model of one curve a class, and what was seen.
    pools
        City pairs.

    Returns
    -------
    model
        With curve ``kind * K + class`` for every product where there are two kinds.
    suffixes
        Of the names of the curves of each kind.
    """
    n_pairs, n_cells, n_classes = len(pools.name), increments.n_cells, model.n_classes
    if n_pairs < 4 or n_cells < 3:
        return model, ONE_KIND
    pair_class = pools.city_pair[view.product // n_classes] * n_classes + view.product % n_classes
    share = model.shapes.share[np.tile(np.arange(n_classes), n_pairs)]
    came, expected = by_cell(increments, model, view, pair_class.astype(np.int32)[increments.owner], share)
    came, expected = (figures.reshape(n_pairs, n_classes, n_cells) for figures in (came, expected))
    late = _lateness(came, expected * model.shapes.share)
    kind = (late > np.median(late)).astype(np.int64)
    one = _likelihood(came, expected, model.shapes.share)
    for _ in range(_TURNS):
        shapes = _fit(model.shapes.days, came, expected, kind)
        told = np.stack(
            [_likelihood(came, expected, shapes.share[g * n_classes : (g + 1) * n_classes]) for g in (0, 1)]
        )
        before, kind = kind, np.argmax(told, axis=0)
        if kind.min() == kind.max():
            return model, ONE_KIND
        if np.array_equal(kind, before):
            break
    gain = 2 * float(np.sum(told.max(axis=0) - one))
    if gain <= n_classes * (n_cells - 1) * np.log(max(float(came.sum()), 2.0)) + 2 * n_pairs * np.log(2):
        return model, ONE_KIND
    if late[kind == 0].mean() > late[kind == 1].mean():
        kind = 1 - kind
    of_product = np.repeat(kind[pools.city_pair], n_classes)
    shapes = _fit(model.shapes.days, came, expected, kind)
    return replace(model, curve=of_product * n_classes + model.fare_class, shapes=shapes), TWO_KINDS


def _lateness(came: FloatArray, expected: FloatArray) -> FloatArray:
    """(n_pairs,) how much later than its classes a city pair books, in standard deviations."""
    at = np.arange(came.shape[2])
    size = came.sum(axis=2)
    plan = expected.sum(axis=2)
    own = np.divide(came @ at, size, out=np.zeros(size.shape), where=size > 0)
    mean = np.divide(expected @ at, plan, out=np.zeros(size.shape), where=plan > 0)
    return np.asarray(np.sum(size * (own - mean), axis=1) / np.sqrt(np.maximum(size.sum(axis=1), 1.0)))


def _fit(days: FloatArray, came: FloatArray, expected: FloatArray, kind: IntArray) -> Shapes:
    """Curves of both kinds, (2 K, M)."""
    groups = [np.concatenate([figures[kind == g].sum(axis=0) for g in (0, 1)]) for figures in (came, expected)]
    return Shapes.fitted(days, *groups)


def _likelihood(came: FloatArray, expected: FloatArray, share: FloatArray) -> FloatArray:
    """(n_pairs,) likelihood of passengers over cells under the curves, (K, M), of one kind; rates left free."""
    seen = np.sum(came * np.log(np.maximum(share, 1e-12)), axis=(1, 2))
    scale = np.maximum(np.sum(expected * share, axis=2), 1e-300)
    return np.asarray(seen - np.sum(came.sum(axis=2) * np.log(scale), axis=1))
