"""Pick-up: demand to come from now on, given what is booked so far.

Additive pick-up adds to the bookings what past departures picked up from the same day on: rate, effects and the share
of the curve to come. Multiplicative pick-up multiplies the bookings by the ratio past departures showed. Both are
ends of one rule. Of n passengers seen where m were expected, the departure's own factor has mean ``1 + w (n / m -
1)``: at w = 0 that is additive, at w = 1 multiplicative pick-up. The combined rule takes the w that history shows,
with variance a of the factor: ``w = a m / (1 + a m)`` as the gamma-Poisson posterior has it, less where busy
departures do not stay busy. Departures are weighed down by age when rates are fitted (exponential smoothing by
departure).

Additive and multiplicative pick-up: J. I. McGill, G. J. van Ryzin (1999), Revenue management: research overview and
prospects, Transportation Science 33, 233-256; K. T. Talluri, G. J. van Ryzin (2004), chapter 9 (both from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from network.arrays import FloatArray

__all__ = ["PICKUPS", "Pickup", "ToCome", "pick_up"]

Pickup = Literal["combined", "additive", "multiplicative"]
PICKUPS: tuple[Pickup, ...] = ("combined", "additive", "multiplicative")


@dataclass(frozen=True, eq=False)
class ToCome:
    """Demand to come.

    Attributes
    ----------
    mean, deviation
        (n,) passengers.
    update
        (n,) factor by which bookings so far moved the mean.
    """

    mean: FloatArray
    deviation: FloatArray
    update: FloatArray


def pick_up(
    expected: FloatArray,
    came: FloatArray,
    expected_so_far: FloatArray,
    variance: FloatArray,
    lasting: FloatArray,
    fresh_so_far: FloatArray,
    fresh: FloatArray,
    rate_variance: FloatArray,
    way: Pickup = "combined",
) -> ToCome:
    """Demand to come of departures.

    Parameters
    ----------
    expected
        (n,) passengers expected to come by rate, effects and curve.
    came, expected_so_far
        (n,) passengers seen while open, and expected while open.
    variance, lasting
        (n,) variance a of a departure's demand beyond Poisson, relative, and the part of it that lasts.
    fresh_so_far, fresh
        (n,) relative variance that is drawn anew by intervals, of those so far and of those to come.
    rate_variance
        (n,) relative variance of the rate, as estimated.
    way
        ``combined``, ``additive`` or ``multiplicative``.
    """
    kept = lasting * variance
    noise = 1 / np.maximum(expected_so_far, 1e-12) + fresh_so_far
    weight = np.where(expected_so_far > 0, kept / (kept + noise), 0.0)
    if way == "additive":
        weight = np.zeros_like(weight)
    elif way == "multiplicative":
        weight = (expected_so_far > 0).astype(np.float64)
    ratio = np.divide(came, expected_so_far, out=np.ones(len(came)), where=expected_so_far > 0)
    update = 1 + weight * (ratio - 1)
    left = update * kept * (1 - weight)
    if way == "multiplicative":
        left = np.where(expected_so_far > 0, np.minimum(update * noise, kept), kept)
    relative = left * (1 + rate_variance) + fresh + update**2 * rate_variance
    mean = expected * update
    return ToCome(mean, np.sqrt(mean + expected**2 * relative), update)
