"""The page of a simulation: one HTML file that holds its pictures and needs nothing else."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape
from importlib.resources import files
from string import Template

import pandas as pd

from legworth.report import CAUTION, money
from legworth.simulation.pictures import build_up_picture, price_picture, revenue_picture
from legworth.simulation.settings import BASELINE
from legworth.simulation.stress import StressLine
from legworth.simulation.study import Simulation
from legworth.simulation.table import tightest
from network import table_schema

__all__ = ["simulation_page"]

HOW = (
    "All controls met the same requests. Differences are taken path by path, which is why they are surer than the "
    "revenues themselves. Leg-level control is EMSR-b on full fares, prepared anew at every reading; the same prepared "
    "once keeps seats for passengers who have long come. Controls with + are prepared anew at every reading; those "
    "that need a linear program for every path played fewer of them."
)
FORMATS = {
    "share_of_bound": "{:.1%}",
    "load_factor": "{:.1%}",
    "connecting_share": "{:.1%}",
    "refused_high": "{:,.1f}",
    "spoiled_seats": "{:,.1f}",
    "cancelled": "{:,.1f}",
    "denied_boardings": "{:,.1f}",
    "difference": "{:+,.0f}",
    "difference_low": "{:+,.0f}",
    "difference_high": "{:+,.0f}",
}


def simulation_page(found: Simulation, table: pd.DataFrame, stress: Sequence[StressLine]) -> str:
    """Write the page.

    Parameters
    ----------
    found
        The simulation.
    table
        Its result table.
    stress
        How gains survive wrong forecasts; may be empty.
    """
    text = (files("legworth") / "templates" / "simulation.html").read_text(encoding="utf-8")
    network, best = found.network, tightest(found.bounds)
    ranked = table[table["paths"] == found.options.paths].sort_values("revenue", ascending=False)
    top = ranked.iloc[0]
    summary = (
        f"{found.options.paths:,} booking horizons from seed {found.options.seed}, as of "
        f"{network.as_of:%Y-%m-%d %H:%M %z}. Of the controls that played all of them {top['label']} earned most: "
        f"{money(top['revenue'])} {network.currency} a path, {top['difference']:+,.0f} against leg-level control "
        f"re-optimised (95 % interval {top['difference_low']:+,.0f} to {top['difference_high']:+,.0f}), "
        f"{top['share_of_bound']:.1%} of the tightest bound ({best.label})."
    )
    return Template(text).substitute(
        title=escape(f"{network.name}: controls played side by side"),
        summary=escape(summary),
        revenue_picture=revenue_picture(found, table),
        controls=_controls(table),
        bounds=_bounds(found),
        build_up_picture=build_up_picture(found),
        price_picture=price_picture(found),
        stress=_stress(stress),
        how=escape(HOW),
        caution=escape(CAUTION),
    )


def _controls(table: pd.DataFrame) -> str:
    schema = table_schema("legworth", "simulation")
    heads = [(column.name.replace("_", " "), column.description, not column.numeric) for column in schema]
    rows = []
    for record in table.to_dict(orient="records"):
        cells = []
        for column in schema:
            value = record[column.name]
            shown = FORMATS.get(column.name, "{:,.0f}").format(value) if column.numeric else str(value)
            cells.append((shown, not column.numeric))
        rows.append(cells)
    return _html(heads, rows)


def _bounds(found: Simulation) -> str:
    best = tightest(found.bounds)
    rows = []
    for bound in found.bounds:
        word = "tightest" if bound is best else bound.caveat or "yes"
        figures = (money(bound.value), money(bound.standard_error))
        rows.append([(bound.label, True), *((figure, False) for figure in figures), (word, True)])
    heads = [("bound", "", True), ("revenue", "", False), ("standard error", "", False), ("holds here", "", True)]
    return _html(heads, rows)


def _stress(lines: Sequence[StressLine]) -> str:
    if not lines:
        return ""
    heads = [("forecast", "", True), ("method", "", True)]
    heads += [(word, "", False) for word in ("revenue", "gain", "low", "high", "gain if right", "survives")]
    rows = []
    for line in lines:
        gains = (line.difference, line.difference_low, line.difference_high, line.difference_right)
        figures = [money(line.revenue), *(f"{gain:+,.0f}" for gain in gains)]
        figures.append("" if line.survives is None else f"{line.survives:.0%}")
        rows.append([(line.case_label, True), (line.method, True), *((figure, False) for figure in figures)])
    note = (
        "<p>The same requests, and controls prepared from forecasts that are wrong. Gains are over "
        f"{escape(BASELINE)} prepared from the same wrong forecast.</p>"
    )
    return f'<h2>When the forecast is wrong</h2>{note}<div class="wide">{_html(heads, rows)}</div>'


def _html(heads: Iterable[tuple[str, str, bool]], rows: Iterable[Iterable[tuple[str, bool]]]) -> str:
    """Return a table; heads are text, explanation and whether they are words, cells text and whether they are words."""
    head = "".join(
        f"<th{_word(word)}{f' title={chr(34)}{escape(about)}{chr(34)}' if about else ''}>{escape(text)}</th>"
        for text, about, word in heads
    )
    body = "".join(
        f"<tr>{''.join(f'<td{_word(word)}>{escape(text)}</td>' for text, word in row)}</tr>\n" for row in rows
    )
    return f"<table>\n<thead><tr>{head}</tr></thead>\n<tbody>\n{body}</tbody>\n</table>"


def _word(word: bool) -> str:
    return ' class="word"' if word else ""
