"""The report as one HTML page that holds its pictures and needs nothing else, neither a script nor another host."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np
from jinja2 import Template

from legworth.estimation.adjustments import Adjustment
from legworth.estimation.method_report import method_notes, method_rows, share_rows
from legworth.estimation.pictures import (
    bias_picture,
    coverage_picture,
    curve_picture,
    demand_picture,
    error_picture,
    method_picture,
)
from legworth.estimation.recipe import Estimated
from legworth.estimation.report import moved_by_bookings, percent
from legworth.estimation.scores import Score, Weakness
from legworth.page_templates import page_templates
from legworth.report import CAUTION, route

__all__ = ["Sheet", "estimate_page"]

LISTED = 15
"""Rows of a table of examples."""
WARNINGS_SHOWN = 40


@dataclass(frozen=True)
class Sheet:
    """A table of the page: caption, headings, rows of text; columns named in ``words`` are text, the others figures."""

    key: str
    caption: str
    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    words: tuple[int, ...] = (0,)


def estimate_page(found: Estimated) -> str:
    """Write the page.

    Parameters
    ----------
    found
        The estimate.

    Returns
    -------
    str
        HTML in UTF-8.
    """
    scores, test = found.scores, found.backtest
    share = found.options.backtest.share
    network = found.network
    ahead = found.departures.days_left[network.product_itinerary] > 0
    parts = found.estimate.forecast
    weak = ahead & parts.weak
    return _template().render(
        found=found,
        network=network,
        history=found.history,
        products=int(ahead.sum()),
        total=float(network.demand.mean[ahead].sum()),
        deviation=float(np.sqrt((network.demand.variance[ahead]).sum())),
        weak=int(weak.sum()),
        weak_total=float(network.demand.mean[weak].sum()),
        update=moved_by_bookings(parts.mean[ahead], parts.update[ahead]) or 0.0,
        own_weight=_mean(parts.own_weight[ahead], parts.mean[ahead]),
        demand=demand_picture(found),
        curves=curve_picture(found),
        methods=found.methods,
        method_notes=method_notes(found.methods) if found.methods is not None else [],
        method_sheets=_method_sheets(found),
        method_marks=method_picture(found.methods) if found.methods is not None else None,
        adjusted=_adjustments(found.adjusted.log) if found.adjusted.log else None,
        adjusted_products=_adjusted_products(found),
        weak_products=_weak_products(found),
        scores=scores,
        test=test,
        share=share,
        error=error_picture(scores) if scores is not None else None,
        bias=bias_picture(scores) if scores is not None else None,
        coverage=coverage_picture(scores, share) if scores is not None else None,
        sheets=_score_sheets(found),
        warnings=found.warnings[:WARNINGS_SHOWN],
        all_warnings=sum(warning.count for warning in found.warnings),
        caution=CAUTION,
    )


@cache
def _template() -> Template:
    environment = page_templates("legworth")
    environment.filters.update(percent=percent, count=lambda value: f"{value:,}", passengers=_passengers)
    return environment.get_template("estimate.html")


def _mean(values: np.ndarray, weight: np.ndarray) -> float:
    total = float(weight.sum())
    return float((values * weight).sum()) / total if total > 0 else 1.0


def _passengers(value: float) -> str:
    return f"{value:,.0f}" if value >= 100 else f"{value:,.1f}" if value >= 1 else f"{value:,.2f}"


def _adjustments(log: Sequence[Adjustment]) -> Sheet:
    rows = []
    for row in log:
        scope = ", ".join(f"{name} {value}" for name, value in row.scope.items()) or "everything"
        change = f"times {row.factor:g}" if row.factor is not None else f"{row.value:g} a date"
        done = "expired" if row.expired else "no product" if not row.products else "applied"
        rows.append(
            (
                row.adjustment,
                scope,
                change,
                done,
                f"{row.products:,}",
                f"{row.shared:,}",
                _passengers(row.before),
                _passengers(row.after),
                row.who,
                row.when[:10],
                (row.until or "")[:10],
                row.why,
            )
        )
    heads = ("Adjustment", "Holds for", "Change", "", "Products", "changed before", "Passengers before", "after")
    return Sheet(
        "adjustments",
        "Adjustments in the order in which they were applied",
        (*heads, "By", "On", "Until", "Why"),
        tuple(rows),
        words=(0, 1, 2, 3, 8, 9, 10, 11),
    )


def _method_sheets(found: Estimated) -> list[Sheet]:
    if found.methods is None:
        return []
    classes = found.methods.fare_classes
    return [
        Sheet(
            "methods",
            "Mean demand of a departure of a product, by class",
            ("Method", "All", "Against bookings", *classes),
            tuple(method_rows(found.methods)),
        ),
        Sheet(
            "methods-share",
            "The same against what was booked",
            ("Method", "All", *classes, "Rounds", "Not settled"),
            tuple(share_rows(found.methods)),
        ),
    ]


def _adjusted_products(found: Estimated) -> Sheet | None:
    at = np.flatnonzero(found.adjusted.changed)
    if not len(at):
        return None
    network, before, names = found.network, found.estimate.mean, found.adjusted.names
    after = network.demand.mean
    order = at[np.argsort(-np.abs(after[at] - before[at]), kind="stable")][:LISTED]
    rows = tuple(
        (
            str(network.itinerary[network.product_itinerary[j]]),
            network.fare_classes[network.product_class[j]],
            str(names[j]),
            _passengers(float(before[j])),
            _passengers(float(after[j])),
        )
        for j in order
    )
    caption = f"The {len(rows)} products that adjustments changed most, of {len(at):,}; all are named in estimates"
    return Sheet(
        "adjusted", caption, ("Itinerary", "Class", "Adjustments", "Estimated", "Adjusted"), rows, words=(0, 1, 2)
    )


def _weak_products(found: Estimated) -> Sheet | None:
    network, parts = found.network, found.estimate.forecast
    ahead = found.departures.days_left[network.product_itinerary] > 0
    at = np.flatnonzero(ahead & parts.weak)
    if not len(at):
        return None
    at = at[np.argsort(-network.demand.mean[at], kind="stable")][:LISTED]
    rows = tuple(
        (
            str(network.itinerary[network.product_itinerary[j]]),
            route(network, int(network.product_itinerary[j])),
            network.fare_classes[network.product_class[j]],
            _passengers(float(network.demand.mean[j])),
            _passengers(float(network.demand.deviation[j])),
            percent(float(parts.own_weight[j])),
            f"{parts.observations[j]:,.1f}",
        )
        for j in at
    )
    heads = ("Itinerary", "Route", "Class", "Passengers", "Deviation", "Own history", "Departures seen")
    return Sheet("weak", "Weak figures with most passengers", heads, rows, words=(0, 1, 2))


def _score_sheets(found: Estimated) -> dict[str, Sheet]:
    scores = found.scores
    if scores is None:
        return {}
    inside = f"In {found.options.backtest.share:.0%}"
    heads = ("", "Forecasts", "Came", "Forecast", "Error", "Chance alone", "Bias", inside)
    rivals = ("Compared", "Estimate", "Last year", "Average", "Bias", "Bias last year", "Bias average")

    def sheet(key: str, caption: str, first: str, rows: Sequence[Score]) -> Sheet:
        return Sheet(key, caption, (first, *heads[1:]), tuple(_own_row(row) for row in rows))

    def against(key: str, caption: str, first: str, rows: Sequence[Score]) -> Sheet:
        return Sheet(key, caption, (first, *rivals), tuple(_rival_row(row) for row in rows))

    whole = (scores.every, *scores.together)
    return {
        "whole": sheet("whole", "All forecasts, one by one and added up", "Forecasts", whole),
        "rivals": against("rivals", "The same, held against simple forecasts", "Forecasts", whole),
        "horizon": sheet("horizon", "By days before departure", "Horizon", scores.by_horizon),
        "horizon_rivals": against(
            "horizon-rivals", "The same, held against simple forecasts", "Horizon", scores.by_horizon
        ),
        "class": sheet("class", "By fare class", "Class", scores.by_class),
        "class_rivals": against("class-rivals", "The same, held against simple forecasts", "Class", scores.by_class),
        "size": sheet("size", "By passengers forecast", "Passengers", scores.by_size),
        "products": _weakest("off-products", "Products farthest off", "Product", scores.weak_products),
        "departures": _weakest("off-departures", "Departures farthest off", "Departure", scores.weak_departures),
    }


def _signed(value: float | None) -> str:
    return "" if value is None else f"{value:+.1%}"


def _own_row(row: Score) -> tuple[str, ...]:
    return (
        row.label,
        f"{row.forecasts:,}",
        _passengers(row.came),
        _passengers(row.forecast),
        percent(row.error),
        percent(row.chance),
        _signed(row.bias),
        percent(row.coverage),
    )


def _rival_row(row: Score) -> tuple[str, ...]:
    return (
        row.label,
        f"{row.compared:,}",
        percent(row.error_same),
        percent(row.error_last_year),
        percent(row.error_average),
        _signed(row.bias_same),
        _signed(row.bias_last_year),
        _signed(row.bias_average),
    )


def _weakest(key: str, caption: str, first: str, rows: Sequence[Weakness]) -> Sheet:
    heads = (first, "Forecasts", "Came", "Forecast", "Off by, deviations")
    return Sheet(
        key,
        caption,
        heads,
        tuple(
            (row.what, f"{row.forecasts:,}", _passengers(row.came), _passengers(row.forecast), f"{row.deviations:+.1f}")
            for row in rows
        ),
    )
