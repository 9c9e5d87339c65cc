"""Two network problems with published bounds: one hub, four spokes, 200 periods, one request a period.

H. Topaloglu (2009), Using Lagrangian relaxation to compute capacity-dependent bid prices in network revenue
management, Operations Research 57(3): test problems (200, 4, 1.0, 4.0) and (200, 4, 1.0, 8.0), named by periods,
spokes, ratio of expected demand to seats and ratio of the high to the low fare.

Standing: the two published figures of each problem are quoted from a secondary text. The data are those of the
published files, reduced to the rule that reproduces them: in period t = 0..199 at most one request arrives, for
each pair of places with the chance `CHANCE`, and it is for the high fare with the chance ``high / (low + high)``,
where ``low = (200 - t) / 200`` and ``high = max(t - s, 0) / (200 - s)`` with the pair's `HIGH_FROM` for s. Pairs
that do not touch the hub, place 0, go over it. The figures called ours were computed by us with other programs.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from network import Network
from network.arrays import FloatArray
from tests.networks import Plan

__all__ = ["PROBLEMS", "HubProblem"]

PERIODS = 200
LEGS = ("1-0", "2-0", "3-0", "4-0", "0-1", "0-2", "0-3", "0-4")
SEATS = (37, 51, 33, 43, 53, 49, 35, 24)
"""The expected requests for every leg, rounded to whole seats."""

FARES_BETWEEN = {"01": 24, "02": 34, "03": 67, "04": 62, "12": 53, "13": 47, "14": 56, "23": 82, "24": 96, "34": 93}
"""Low fares, the same in both directions."""

CHANCE = {
    "0-1": 0.09960128709206886,
    "0-2": 0.041764450952859716,
    "0-3": 0.030921258465293217,
    "0-4": 0.01219439738640903,
    "1-0": 0.06939032495094886,
    "1-2": 0.03976943899547469,
    "1-3": 0.07307652515831342,
    "1-4": 0.0005284171054752357,
    "2-0": 0.07823290752930079,
    "2-1": 0.050655633778080494,
    "2-3": 0.06068437207819368,
    "2-4": 0.06554916702752828,
    "3-0": 0.0011235080191055581,
    "3-1": 0.018723170455555178,
    "3-2": 0.1024024928693957,
    "3-4": 0.041485431687679854,
    "4-0": 0.045427229884404285,
    "4-1": 0.09357742045116131,
    "4-2": 0.062291017440145535,
    "4-3": 0.012601548672606428,
}

HIGH_FROM = {
    "0-1": 131.2985437731259,
    "0-2": 111.60710217538416,
    "0-3": 116.91655315269651,
    "0-4": 125.7358983946439,
    "1-0": 105.23534614503345,
    "1-2": 104.66807360898578,
    "1-3": 126.89460756722154,
    "1-4": 117.4727142033305,
    "2-0": 104.74355828741025,
    "2-1": 118.18813061757116,
    "2-3": 106.84411242833414,
    "2-4": 106.16921681528295,
    "3-0": 105.3788470006155,
    "3-1": 118.04926196377933,
    "3-2": 108.19724688961537,
    "3-4": 107.26791097191665,
    "4-0": 107.78740354469318,
    "4-1": 101.280118236865,
    "4-2": 121.8827983445231,
    "4-3": 121.79272201032512,
}


@dataclass(frozen=True)
class HubProblem:
    """One of the problems.

    Attributes
    ----------
    ratio
        High fare over low fare.
    published_bound, published_revenue
        Lagrangian bound, and revenue of the policy that follows from it, currency; from a secondary text.
    linear_value
        Optimum of the deterministic linear program; ours, by another program.
    decomposition
        Decomposition bound; ours, by another program, with one optimal set of duals.
    deepest_bound
        The least Lagrangian bound we know; ours, by another program.
    """

    ratio: float
    published_bound: float
    published_revenue: float
    linear_value: float
    decomposition: float
    deepest_bound: float

    @property
    def paths(self) -> list[tuple[int, ...]]:
        """Legs of every itinerary, in the order of the pairs."""
        paths = []
        for pair in CHANCE:
            origin, destination = pair.split("-")
            over_hub = (pair,) if "0" in (origin, destination) else (f"{origin}-0", f"0-{destination}")
            paths.append(tuple(LEGS.index(leg) for leg in over_hub))
        return paths

    @property
    def requests(self) -> FloatArray:
        """(200, 40) chance of a request by period, the first to come first, and product: high, low, high, ..."""
        t = np.arange(PERIODS)[:, None]
        begin = np.array(list(HIGH_FROM.values()))
        low = (PERIODS - t) / PERIODS
        high = np.maximum(t - begin, 0.0) / (PERIODS - begin)
        part = high / (low + high)
        chance = np.array(list(CHANCE.values()))
        return np.stack([chance * part, chance * (1.0 - part)], axis=2).reshape(PERIODS, -1)

    def network(self) -> Network:
        """Return the network, with the expected requests as means of Poisson demand."""
        mean = self.requests.sum(axis=0).reshape(-1, 2).tolist()
        products = []
        for pair, (high, low) in zip(CHANCE, mean, strict=True):
            fare = float(FARES_BETWEEN["".join(sorted(pair.split("-")))])
            products.append(((self.ratio * fare, high, high**0.5), (fare, low, low**0.5)))
        return Plan(SEATS, tuple(self.paths), tuple(products), "poisson").network()


PROBLEMS = (
    HubProblem(4.0, 20_439, 20_018, 21_530.98, 21_289.4, 20_410.8),
    HubProblem(8.0, 33_305, 32_226, 34_570.97, 34_281.0, 33_229.4),
)
