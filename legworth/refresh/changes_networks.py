"""Two nights' networks of a part on the same positions, so that figures of the one can be put into the other."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace

import numpy as np
import pandas as pd

from network import Demand, Family, Legs, Network
from network.arrays import BoolArray, FloatArray, IntArray, NameArray

__all__ = ["NetworkPair", "leg_alone"]


@dataclass(frozen=True, eq=False)
class NetworkPair:
    """Last night's and tonight's network, both over the legs, itineraries and fare classes of either night.

    A leg that one night did not have has no seats in its network; a product that one night did not have has no demand
    in its network, and the fare of the other night. Neither can be sold, so each network has the optimum of its night.

    Attributes
    ----------
    last, tonight
        The networks. They differ in seats, fares and demand alone.
    on_sale_last, on_sale_tonight
        (J,) which products each night had.
    """

    last: Network
    tonight: Network
    on_sale_last: BoolArray
    on_sale_tonight: BoolArray

    @classmethod
    def of(cls, last: Network, tonight: Network) -> NetworkPair:
        """Put two networks on the same positions; legs, itineraries (by name and path) and classes match by name."""
        legs, leg_of = _union(last.legs.name, tonight.legs.name)
        paths, path_of = _union(_path_keys(last), _path_keys(tonight))
        classes, class_of = _union(*(np.array(night.fare_classes, dtype=object) for night in (last, tonight)))
        keys = [
            path_of[n][night.product_itinerary] * len(classes) + class_of[n][night.product_class]
            for n, night in enumerate((last, tonight))
        ]
        products = np.union1d(*keys)
        place = [np.searchsorted(products, key) for key in keys]
        new_paths = np.flatnonzero(path_of[1] >= last.n_itineraries)
        length = np.concatenate([np.diff(last.path_start), np.diff(tonight.path_start)[new_paths]])
        more = [leg_of[1][tonight.path_leg[slice(*tonight.path_start[i : i + 2])]] for i in new_paths]
        shape = replace(
            last,
            legs=_legs(last.legs, tonight.legs, np.flatnonzero(leg_of[1] >= last.n_legs)),
            remaining=np.zeros(len(legs), dtype=np.int64),
            itinerary=np.concatenate([last.itinerary, tonight.itinerary[new_paths]]),
            path_start=np.concatenate([[0], np.cumsum(length)]),
            path_leg=np.concatenate([last.path_leg, *more]),
            fare_classes=tuple(classes.tolist()),
            product_itinerary=products // len(classes),
            product_class=products % len(classes),
            fare=np.zeros(len(products)),
            demand=Demand.of(np.zeros(len(products)), np.zeros(len(products))),
            curve=np.full(len(products), -1),
        )
        assert len(shape.itinerary) == len(paths)
        sides = [_side(shape, night, leg_of[n], place[n]) for n, night in enumerate((last, tonight))]
        had = [np.isin(np.arange(len(products)), at) for at in place]
        fares = [np.where(had[n], sides[n].fare, sides[1 - n].fare) for n in range(2)]
        return cls(replace(sides[0], fare=fares[0]), replace(sides[1], fare=fares[1]), had[0], had[1])

    def leg(self, name: str) -> int:
        """Position of a leg."""
        return int(np.flatnonzero(self.last.legs.name == name)[0])

    def products_of(self, leg: int) -> BoolArray:
        """(J,) which products use a leg."""
        uses = np.zeros(self.last.n_legs)
        uses[leg] = 1.0
        return np.asarray(self.last.displacement(uses) > 0)


def leg_alone(pair: NetworkPair, leg: int, prices: FloatArray) -> NetworkPair:
    """Cut one leg out, its products at their fares less what the other legs of their path cost.

    Parameters
    ----------
    pair
        The two nights.
    leg
        Position of the leg.
    prices
        (L,) bid prices of all legs, the same for both nights.

    Returns
    -------
    NetworkPair
        One leg, one itinerary for each of its products; one that does not pay for the other legs has the fare 0.
    """
    chosen = np.flatnonzero(pair.products_of(leg))
    elsewhere = pair.last.displacement(prices)[chosen] - prices[leg]
    nights = []
    for night in (pair.last, pair.tonight):
        fare = night.fare[chosen] - elsewhere
        nights.append(
            replace(
                night,
                legs=_take_leg(night.legs, leg),
                remaining=night.remaining[[leg]],
                itinerary=night.itinerary[night.product_itinerary[chosen]],
                path_start=np.arange(len(chosen) + 1),
                path_leg=np.zeros(len(chosen), dtype=np.int64),
                product_itinerary=np.arange(len(chosen)),
                product_class=np.zeros(len(chosen), dtype=np.int64),
                fare=np.maximum(fare, 0.0),
                demand=night.demand.take(chosen),
                curve=np.full(len(chosen), -1),
            )
        )
    return NetworkPair(nights[0], nights[1], pair.on_sale_last[chosen], pair.on_sale_tonight[chosen])


def _side(shape: Network, night: Network, leg_of: IntArray, place: IntArray) -> Network:
    """Fill the figures of one night into the common shape."""
    remaining = np.zeros(len(shape.legs), dtype=np.int64)
    remaining[leg_of] = night.remaining
    fare, mean, deviation = (np.zeros(len(shape.fare)) for _ in range(3))
    family = np.full(len(fare), Family.POISSON, dtype=np.int8)
    fare[place], mean[place], deviation[place] = night.fare, night.demand.mean, night.demand.deviation
    family[place] = night.demand.family
    return replace(shape, remaining=remaining, fare=fare, demand=Demand(mean, deviation, family))


def _union(last: NameArray, tonight: NameArray) -> tuple[NameArray, tuple[IntArray, IntArray]]:
    """Names of both, last night's first, and where the names of each stand among them."""
    index = pd.Index(last, dtype=object)
    found = index.get_indexer(pd.Index(tonight, dtype=object))
    new = np.flatnonzero(found < 0)
    position = found.astype(np.int64)
    position[new] = len(last) + np.arange(len(new))
    return np.concatenate([last, tonight[new]]), (np.arange(len(last)), position)


def _path_keys(network: Network) -> NameArray:
    """Name and path of every itinerary: the same name on other legs is another itinerary."""
    legs, start = network.legs.name[network.path_leg].tolist(), network.path_start.tolist()
    keys = [f"{name} {' '.join(legs[start[i] : start[i + 1]])}" for i, name in enumerate(network.itinerary.tolist())]
    return np.array(keys, dtype=object)


def _legs(last: Legs, tonight: Legs, new: IntArray) -> Legs:
    """Last night's legs and tonight's new ones; stations of the latter are not looked up, since prices need none."""
    return Legs(
        **{f.name: np.concatenate([getattr(last, f.name), getattr(tonight, f.name)[new]]) for f in fields(Legs)}
    )


def _take_leg(legs: Legs, leg: int) -> Legs:
    return Legs(**{f.name: getattr(legs, f.name)[[leg]] for f in fields(Legs)})
