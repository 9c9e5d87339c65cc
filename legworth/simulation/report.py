"""What ``simulate`` prints, and the same as one document."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

import pandas as pd
from rich.table import Table

from legworth import __version__
from legworth.report import CAUTION, console_for_output, money
from legworth.simulation.settings import BASELINE
from legworth.simulation.stress import StressLine
from legworth.simulation.study import Simulation
from legworth.simulation.table import tightest

__all__ = ["print_simulation", "simulation_as_json"]


def simulation_as_json(found: Simulation, table: pd.DataFrame, stress: Sequence[StressLine]) -> dict[str, Any]:
    """Everything but the seconds taken, so that the same seed gives the same document."""
    options = asdict(found.options)
    del options["jobs"]
    traces = {
        leg: {"days_before": _plain(trace.days), "price": {name: _plain(line) for name, line in trace.price.items()}}
        for leg, trace in found.traces.items()
    }
    return {
        "network": found.network.name,
        "currency": found.network.currency,
        "as_of": found.network.as_of.isoformat(),
        "version": __version__,
        "settings": options,
        "compared_with": BASELINE,
        "controls": table.to_dict(orient="records"),
        "bounds": [asdict(bound) for bound in found.bounds],
        "tightest_bound": tightest(found.bounds).name,
        "stress": [asdict(line) for line in stress],
        "prices_over_time": traces,
    }


def _plain(values: Any) -> list[float | None]:
    """Numbers for a document, None where there is none."""
    return [None if math.isnan(value) else float(value) for value in values]


def print_simulation(
    found: Simulation, table: pd.DataFrame, stress: Sequence[StressLine], files: Sequence[Path]
) -> None:
    """Print the controls side by side, the bounds, and how gains survive wrong forecasts."""
    console = console_for_output()
    network, options = found.network, found.options
    console.print(
        f"{network.name}: {options.paths:,} paths from seed {options.seed}, in {network.currency} a path",
        style="bold",
        highlight=False,
    )
    console.print(_controls(table), highlight=False)
    console.print(_bounds(found), highlight=False)
    if stress:
        console.print(_stress(stress), highlight=False)
    for file in files:
        console.print(f"Written: {file}", highlight=False, markup=False, soft_wrap=True)
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def _controls(table: pd.DataFrame) -> Table:
    shown = Table(title=f"Controls side by side; differences to {BASELINE} path by path", title_justify="left")
    shown.add_column("Control")
    for heading in ("Paths", "Revenue", "s.e.", "Difference", "95 % ±", "Of bound", "Load", "Connecting"):
        shown.add_column(heading, justify="right")
    shown.add_column("High refused", justify="right")
    shown.add_column("Spoiled", justify="right")
    denied = bool((table["denied_boardings"] > 0).any())
    if denied:
        shown.add_column("Denied", justify="right")
    for row in table.to_dict(orient="records"):
        shown.add_row(
            str(row["method"]),
            f"{row['paths']:,}",
            money(row["revenue"]),
            money(row["standard_error"]),
            f"{row['difference']:+,.0f}",
            money((row["difference_high"] - row["difference_low"]) / 2),
            f"{row['share_of_bound']:.1%}",
            f"{row['load_factor']:.1%}",
            f"{row['connecting_share']:.1%}",
            f"{row['refused_high']:,.1f}",
            f"{row['spoiled_seats']:,.1f}",
            *([f"{row['denied_boardings']:,.1f}"] if denied else []),
        )
    return shown


def _bounds(found: Simulation) -> Table:
    shown = Table(title="What no control can be expected to beat", title_justify="left")
    shown.add_column("Bound")
    shown.add_column("Revenue", justify="right")
    shown.add_column("s.e.", justify="right")
    shown.add_column("Holds")
    best = tightest(found.bounds)
    for bound in found.bounds:
        word = "tightest" if bound is best else bound.caveat or "yes"
        shown.add_row(bound.label, money(bound.value), money(bound.standard_error), word)
    return shown


def _stress(lines: Sequence[StressLine]) -> Table:
    shown = Table(title=f"Wrong forecasts: gain over {BASELINE} under the same forecast", title_justify="left")
    shown.add_column("Forecast")
    shown.add_column("Control")
    for heading in ("Revenue", "Gain", "95 % ±", "Gain if right", "Survives"):
        shown.add_column(heading, justify="right")
    case = ""
    for line in lines:
        label, case = "" if line.case == case else line.case_label, line.case
        shown.add_row(
            label,
            line.method,
            money(line.revenue),
            f"{line.difference:+,.0f}",
            money((line.difference_high - line.difference_low) / 2),
            f"{line.difference_right:+,.0f}",
            "" if line.survives is None else f"{line.survives:.0%}",
        )
    return shown
