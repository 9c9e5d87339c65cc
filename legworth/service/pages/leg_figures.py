"""Figures of one leg: its price curves, the worth of further seats, and whom one more sale displaces."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.connection import Displaced, displaced_products
from legworth.service.pages.chart import Chart, Line, Mark, Scale
from legworth.service.served_part import ServedPart
from lp import LpOptions, SeatValues
from network import Network, components
from network.arrays import FloatArray

__all__ = [
    "CurveTable",
    "OneMoreSale",
    "SeatValueLine",
    "curve_charts",
    "days_text",
    "one_more_sale",
    "seat_value_chart",
]

MOST_CURVES = 5
MOST_PRODUCTS = 6
MOST_SEATS = 30
MOST_ROWS = 14


@dataclass(frozen=True)
class CurveTable:
    """Prices by seats left (rows) and days before departure (columns); ``now`` says which row is that of now."""

    days: tuple[float, ...]
    seats: tuple[int, ...]
    price: tuple[tuple[float, ...], ...]
    now: int | None


def days_text(days: float) -> str:
    """Days before departure in words, the last two in hours."""
    return f"{24 * days:.3g} h" if days < 2 else f"{days:.3g} days"


def curve_charts(part: ServedPart, leg: int, days: float, left: int) -> tuple[list[Chart], CurveTable | None]:
    """Draw the price over seats left, at several days, and over the days to come, at several seats left.

    Parameters
    ----------
    part, leg
        The leg, by its position in the part.
    days
        Days before departure now.
    left
        Seats left now.

    Returns
    -------
    charts, table
        No chart and no table if the night has no price curves for the leg.
    """
    prices = part.prices
    begin, end = int(prices.first_block[leg]), int(prices.first_block[leg + 1])
    if begin == end:
        return [], None
    block_days = prices.days[begin:end]
    current = int(np.clip(np.searchsorted(-block_days, -days, side="right") - 1, 0, end - begin - 1))
    chosen = np.unique(np.linspace(current, end - begin - 1, MOST_CURVES).round().astype(int))
    curves = [prices.price[prices.first_seat[begin + b] : prices.first_seat[begin + b + 1]] for b in range(end - begin)]
    longest = max(len(curves[b]) for b in chosen)
    x, y = Scale.across(longest, low=1.0, whole=True), Scale.up(max(float(curves[b].max()) for b in chosen))
    lines = tuple(
        Line.through(f"{days_text(block_days[b])} before", style, x(np.arange(1, len(curves[b]) + 1)), y(curves[b]))
        for style, b in enumerate(chosen)
    )
    shown = min(left, len(curves[current]))
    price = float(curves[current][shown - 1]) if left > 0 and days > 0 else None
    marks = () if price is None else (Mark(float(x(shown)), float(y(price)), f"now: {left} left, {price:,.2f}"),)
    over_seats = Chart(
        "by-seats",
        "Price of the next sale by seats left",
        "One line a day before departure. The price falls as more seats are left, and as departure comes near. "
        + ("" if price is None else f"Now {left} seats are left and the price is {price:,.2f}."),
        x,
        y,
        "seats left",
        f"price, {part.network.currency}",
        lines,
        marks,
    )
    table = _curve_table(block_days, curves, chosen, left)
    return [over_seats, *_over_days(block_days, curves, current, days, left, part.network.currency)], table


def _over_days(
    block_days: FloatArray, curves: list[FloatArray], current: int, days: float, left: int, currency: str
) -> list[Chart]:
    """Price over the days to come if nothing is sold until then."""
    if left <= 0 or days <= 0:
        return []
    seats = sorted({left, max(1, left // 2), 1}, reverse=True)
    later = block_days[current:]
    start = np.append(np.minimum(later, days), 0.0)
    rows = [[float(curve[min(s, len(curve)) - 1]) for curve in curves[current:]] for s in seats]
    x, y = Scale.across(days, falling=True), Scale.up(max(map(max, rows)))
    lines = tuple(
        Line.through(f"{s} left{' (as now)' if s == left else ''}", style, x(start), y([*row, row[-1]]), steps=True)
        for style, (s, row) in enumerate(zip(seats, rows, strict=True))
    )
    mark = Mark(float(x(start[0])), float(y(rows[0][0])), f"now: {rows[0][0]:,.2f}")
    about = f"Days before departure run down to the right. If nothing is sold, the price goes from {rows[0][0]:,.2f} "
    return [
        Chart(
            "by-days",
            "Price of the next sale by days before departure",
            f"{about}to {rows[0][-1]:,.2f}.",
            x,
            y,
            "days before departure",
            f"price, {currency}",
            lines,
            (mark,),
        )
    ]


def _curve_table(block_days: FloatArray, curves: list[FloatArray], chosen: np.ndarray, left: int) -> CurveTable:
    longest = max(len(curves[b]) for b in chosen)
    seats = set(np.unique(np.geomspace(1, longest, MOST_ROWS).round().astype(int)).tolist())
    if 0 < left <= longest:
        seats.add(left)
    rows = tuple(sorted(seats))
    price = tuple(tuple(float(curves[b][min(s, len(curves[b])) - 1]) for b in chosen) for s in rows)
    return CurveTable(tuple(float(block_days[b]) for b in chosen), rows, price, left if left in rows else None)


@dataclass(frozen=True)
class SeatValueLine:
    """A product's further seats on a leg.

    Attributes
    ----------
    itinerary, fare_class, fare
        The product.
    elsewhere
        Bid prices of the other legs of its itinerary, currency.
    mean
        Demand to come, passengers.
    seats, last
        Seats of it that are worth at least the leg's bid price, and what the last of them is worth, None without any.
    """

    itinerary: str
    fare_class: str
    fare: float
    elsewhere: float
    mean: float
    seats: int
    last: float | None


def seat_value_chart(part: ServedPart, leg: int) -> tuple[Chart | None, tuple[SeatValueLine, ...]]:
    """Draw what the first, second and further seats of the leg's products are worth to the leg.

    The k-th seat of product j is worth ``f_j P(D_j >= k)`` less the bid prices of the other legs: its expected
    marginal seat value. Seats above the leg's bid price are those that the probabilistic program sets aside.

    Returns
    -------
    chart, lines
        Products with the most money in their demand to come first of all, by adjusted fare; no chart without any.
    """
    network, bid_price = part.network, part.prices.bid_price
    through = np.flatnonzero(network.incidence[[leg], :].toarray().ravel())
    products = np.flatnonzero(np.isin(network.product_itinerary, through))
    bid = float(bid_price[leg])
    elsewhere = network.displacement(np.nan_to_num(bid_price))[products] - bid
    adjusted = network.fare[products] - elsewhere
    mean = network.demand.expected[products]
    worth = np.where(adjusted > 0, adjusted * mean, 0.0)
    best = np.argsort(-worth, kind="stable")[:MOST_PRODUCTS]
    best = best[worth[best] > 0]
    best = best[np.argsort(-adjusted[best], kind="stable")]
    if not len(best):
        return None, ()
    seat = np.arange(1, MOST_SEATS + 1)
    demand = network.demand.take(products[best])
    values = np.column_stack([network.fare[products[best]] * demand.survivor(np.full(len(best), k)) for k in seat])
    values -= elsewhere[best, np.newaxis]
    open_seats = (values >= bid - 1e-9).sum(axis=1)
    worth_drawing = max(0.2 * bid, 0.02 * float(values.max()))
    reach = int(np.clip((values > worth_drawing).sum(axis=1).max() + 1, 4, MOST_SEATS))
    x, y = Scale.across(reach, low=1.0, whole=True), Scale.up(max(float(values.max()), bid))
    lines, marks, rows = [], [], []
    for style, (place, row) in enumerate(zip(best.tolist(), values, strict=True)):
        product = products[place]
        name = str(network.itinerary[network.product_itinerary[product]])
        fare_class = network.fare_classes[network.product_class[product]]
        above = max(int(np.count_nonzero(row[:reach] > 0)), 1)
        lines.append(Line.through(f"{name} {fare_class}", style, x(seat[:above]), y(np.maximum(row[:above], 0))))
        k = int(open_seats[style])
        if 0 < k <= reach:
            marks.append(Mark(float(x(k)), float(y(row[k - 1])), "", style))
        figures = (float(network.fare[product]), float(elsewhere[place]), float(mean[place]))
        rows.append(SeatValueLine(name, fare_class, *figures, k, float(row[k - 1]) if k else None))
    return (
        Chart(
            "seat-values",
            "Value of further seats of the leg's products",
            f"One line a product. The rule across is the bid price, {bid:,.2f}; a dot marks the last seat of a product "
            "that is worth at least that.",
            x,
            y,
            "k-th seat of the product",
            f"worth to this leg, {network.currency}",
            tuple(lines),
            tuple(marks),
            float(y(bid)),
            f"bid price {bid:,.2f}",
        ),
        tuple(rows),
    )


@dataclass(frozen=True)
class OneMoreSale:
    """What one more sale on a leg displaces: its exact value, the bid price at these seats, and whom."""

    left: int
    value: float
    displaced: tuple[Displaced, ...]


def one_more_sale(network: Network, leg: int, options: LpOptions) -> OneMoreSale:
    """Solve without the leg's last seat, and see who is expected less, or more.

    Raises
    ------
    SolveError
        If there is no certified optimum.
    """
    piece = next(each for each in components(network) if leg in each.legs)
    here = piece.network
    at = int(np.searchsorted(piece.legs, leg))
    left = int(here.remaining[at])
    values = SeatValues.of(here, options)
    fewer = here.remaining.copy()
    fewer[at] -= 1
    without = values.at(fewer)
    return OneMoreSale(
        left, values.present.value - without.value, displaced_products(here, {at}, values.present.sales - without.sales)
    )
