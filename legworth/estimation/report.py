"""What ``estimate`` prints, and the same as one document."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
from rich.console import Console
from rich.table import Table

from legworth import __version__
from legworth.estimation.method_report import method_notes, methods_as_json, methods_table
from legworth.estimation.recipe import Estimated
from legworth.estimation.scores import Score
from legworth.report import CAUTION, console_for_output, faults_as_json
from network.arrays import FloatArray

__all__ = ["WARNINGS_TOLD", "estimate_as_json", "moved_by_bookings", "percent", "print_estimate"]

WARNINGS_TOLD = 12
"""Warnings printed one by one; all stand in the document."""


def estimate_as_json(found: Estimated) -> dict[str, Any]:
    """Everything but the seconds taken, so that the same input gives the same document."""
    network, history, fit = found.network, found.history, found.estimate.fit
    options = found.options
    return {
        "network": network.name,
        "currency": network.currency,
        "as_of": network.as_of.isoformat(),
        "version": __version__,
        "inputs": found.inputs,
        "history": {
            "rows": found.rows,
            "series": history.n_series,
            "itineraries": len(history.itinerary),
            "first_departure": str(history.departure.min()),
            "last_departure": str(history.departure.max()),
            "open_share": float(history.open.mean()),
        },
        "settings": {
            **asdict(options.demand),
            "unknown": options.unknown,
            "may_reopen": options.may_reopen,
            "backtest": asdict(options.backtest),
        },
        "demand": _demand(found),
        "by_class": [_demand(found, at) for at in range(len(network.fare_classes))],
        "methods": methods_as_json(found.methods),
        "adjustments": [row.as_dict() for row in found.adjusted.log],
        "backtest": None if found.scores is None or found.backtest is None else _backtest(found),
        "notes": list(fit.warnings),
        "warnings": faults_as_json(found.warnings),
    }


def _demand(found: Estimated, fare_class: int | None = None) -> dict[str, Any]:
    network, parts = found.network, found.estimate.forecast
    ahead = found.departures.days_left[network.product_itinerary] > 0
    chosen = ahead if fare_class is None else ahead & (network.product_class == fare_class)
    weak = chosen & parts.weak
    return {
        "fare_class": None if fare_class is None else network.fare_classes[fare_class],
        "products": int(chosen.sum()),
        "to_come": float(network.demand.mean[chosen].sum()),
        "to_come_before_adjustments": float(parts.mean[chosen].sum()),
        "weak_products": int(weak.sum()),
        "weak_to_come": float(network.demand.mean[weak].sum()),
        "own_weight": _weighted(parts.own_weight[chosen], network.demand.mean[chosen]),
        "bookings_so_far": moved_by_bookings(parts.mean[chosen], parts.update[chosen]),
    }


def _weighted(values: np.ndarray, weight: np.ndarray) -> float | None:
    """Mean weighed by passengers; None if none are expected."""
    total = float(weight.sum())
    return float((values * weight).sum()) / total if total > 0 else None


def moved_by_bookings(mean: FloatArray, update: FloatArray) -> float | None:
    """Share by which bookings so far moved a total; None if nothing was expected."""
    expected = float(np.divide(mean, update, out=np.zeros(len(mean)), where=update > 0).sum())
    return float(mean.sum()) / expected - 1.0 if expected > 0 else None


def _backtest(found: Estimated) -> dict[str, Any]:
    assert found.backtest is not None
    assert found.scores is not None
    test = found.backtest
    return {
        "snapshots": [str(day) for day in test.snapshots],
        "city_pairs": test.pairs,
        "all_city_pairs": test.all_pairs,
        "left_out": test.left_out,
        **found.scores.as_dict(),
    }


def print_estimate(
    found: Estimated, files: Sequence[Path], kept: Sequence[Path] = (), *, methods: bool = False
) -> None:
    """Print what was estimated, how it did on the past, and where it was written.

    Parameters
    ----------
    found
        The estimate.
    files, kept
        What was written, and what people had written there before.
    methods
        Whether other methods are shown beside it.
    """
    console = console_for_output()
    network, history = found.network, found.history
    for warning in found.warnings[:WARNINGS_TOLD]:
        console.print(str(warning), highlight=False, soft_wrap=True)
    if len(found.warnings) > WARNINGS_TOLD:
        rest = sum(warning.count for warning in found.warnings[WARNINGS_TOLD:])
        console.print(f"and {rest:,} more warnings; all are in estimate.json", highlight=False)
    for note in found.estimate.fit.warnings:
        console.print(note, highlight=False, soft_wrap=True)
    console.print(f"{network.name}, as of {network.as_of:%Y-%m-%d %H:%M %z}", style="bold", highlight=False)
    console.print(
        f"{found.rows:,} readings of {history.n_series:,} departures of products, "
        f"{history.departure.min()} to {history.departure.max()}",
        highlight=False,
    )
    console.print(_classes(found), highlight=False)
    if methods:
        _print_methods(console, found)
    for row in found.adjusted.log:
        console.print(_told(row.as_dict()), highlight=False, soft_wrap=True)
    if found.scores is not None:
        console.print(_scores((found.scores.every, *found.scores.together, *found.scores.by_horizon)), highlight=False)
    elif found.options.backtest.snapshots:
        console.print("History is too short to be tested on the past", highlight=False)
    for file in files:
        console.print(f"Written: {file}", highlight=False, markup=False, soft_wrap=True)
    for file in kept:
        console.print(f"Kept what was there before: {file}", highlight=False, markup=False, soft_wrap=True)
    took = ", ".join(f"{step} {seconds:.1f} s" for step, seconds in found.seconds.items())
    console.print(took, style="dim", highlight=False)
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def _print_methods(console: Console, found: Estimated) -> None:
    if found.methods is None:
        console.print("No departure has left whose readings are whole, so methods cannot be compared", highlight=False)
        return
    console.print(methods_table(found.methods), highlight=False)
    for note in method_notes(found.methods):
        console.print(note, highlight=False, soft_wrap=True)


def _told(row: dict[str, Any]) -> str:
    """One adjustment in a line."""
    scope = ", ".join(f"{name} {value}" for name, value in row["scope"].items()) or "everything"
    change = f"times {row['factor']:g}" if row["factor"] is not None else f"set to {row['value']:g} a date"
    if row["expired"]:
        return f"Adjustment {row['adjustment']} ({scope}, {change}) expired on {row['until']}; nothing was changed"
    return (
        f"Adjustment {row['adjustment']} ({scope}, {change}) by {row['who']}: {row['before']:,.1f} passengers became "
        f"{row['after']:,.1f} on {row['products']:,} products"
    )


def _classes(found: Estimated) -> Table:
    shown = Table(title="Demand to come", title_justify="left")
    shown.add_column("Class")
    for heading in ("Products", "Passengers", "Own history", "Bookings so far", "Weak products", "their passengers"):
        shown.add_column(heading, justify="right")
    rows = [_demand(found, at) for at in range(len(found.network.fare_classes))]
    for row in (*rows, _demand(found)):
        shown.add_row(
            row["fare_class"] or "all",
            f"{row['products']:,}",
            f"{row['to_come']:,.1f}",
            percent(row["own_weight"]),
            "" if row["bookings_so_far"] is None else f"{row['bookings_so_far']:+.1%}",
            f"{row['weak_products']:,}",
            f"{row['weak_to_come']:,.1f}",
        )
    return shown


def _scores(scores: Sequence[Score]) -> Table:
    shown = Table(
        title="Tested on the past: error of forecasts, and what chance alone makes of it", title_justify="left"
    )
    shown.add_column("Forecasts")
    for heading in ("Number", "Came", "Error", "Chance", "Bias", "In 80 %", "Last year", "Average"):
        shown.add_column(heading, justify="right")
    for score in scores:
        shown.add_row(
            score.label,
            f"{score.forecasts:,}",
            f"{score.came:,.0f}",
            percent(score.error),
            percent(score.chance),
            "" if score.bias is None else f"{score.bias:+.1%}",
            percent(score.coverage),
            percent(score.error_last_year),
            percent(score.error_average),
        )
    return shown


def percent(value: float | None) -> str:
    """Share in per cent, blank where there is none."""
    return "" if value is None else f"{value:.1%}"
