"""Pictures of a simulation, as SVG text to stand in a page."""

from __future__ import annotations

import io
import warnings

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator, StrMethodFormatter

from heuristics.arrivals import days_before_departure
from legworth.simulation.measures import BINS
from legworth.simulation.settings import BASELINE
from legworth.simulation.study import Simulation
from legworth.simulation.table import tightest

__all__ = ["build_up_picture", "price_picture", "revenue_picture"]

# One hue for what gains on leg-level control, one for what loses, grey for what cannot be told apart.
GAINS, LOSES, SAME = "#1d6f5c", "#b4552d", "#7b8088"
INK = "#3a3f45"
LINES = ("#8a6d3b", "#d98a1f", "#6a4c93", "#a77fc4", "#2b6ca3", "#8fb8de", "#5c8a3c", "#1d6f5c", "#c2437a", INK)
SOON = 0.01
"""Days that a picture shows at least."""
BUILD_UP = ("curves", "deterministic", "adjusted")


def revenue_picture(found: Simulation, table: pd.DataFrame) -> str:
    """Difference to leg-level control with its 95 % interval, one line a control, and the tightest bound."""
    rows = table.to_dict(orient="records")
    place = np.arange(len(rows))[::-1]
    figure, axes = _sheet(9.5, 1.4 + 0.34 * len(rows))
    for y, row in zip(place.tolist(), rows, strict=True):
        low, high = row["difference_low"], row["difference_high"]
        colour = GAINS if low > 0 else LOSES if high < 0 else SAME
        axes.plot([low, high], [y, y], color=colour, linewidth=2.2, solid_capstyle="butt")
        axes.plot(row["difference"], y, "o", color=colour, markersize=6)
        axes.annotate(
            f"{row['revenue']:,.0f}  ({row['paths']:,} paths)",
            (1.01, y),
            xycoords=("axes fraction", "data"),
            va="center",
            color=INK,
        )
    axes.axvline(0.0, color=SAME, linewidth=0.8)
    bound = tightest(found.bounds).value - float(found.tallies[BASELINE].revenue.mean())
    axes.axvline(bound, color=INK, linewidth=1.2, linestyle="--")
    axes.annotate("tightest bound ", (bound, place[0] + 0.75), ha="right", va="top", color=INK)
    axes.xaxis.set_major_locator(MaxNLocator(6))
    axes.xaxis.set_major_formatter(StrMethodFormatter("{x:+,.0f}"))
    axes.set_yticks(place, [row["label"] for row in rows])
    axes.set_ylim(-0.7, len(rows) - 0.1)
    axes.set_xlabel(
        f"difference to {BASELINE} on the same paths, {found.network.currency} a path; revenue at the right"
    )
    return _svg(figure)


def build_up_picture(found: Simulation) -> str:
    """How bookings build up by fare class under leg-level control and up to three others."""
    names = [name for name in (BASELINE, *BUILD_UP) if name in found.tallies]
    horizon = float(days_before_departure(found.network).max(initial=0.0))
    days = np.linspace(0.0, horizon, BINS + 1)
    figure = Figure(figsize=(3.2 * len(names) + 1, 3.4), layout="constrained")
    panels: list[Axes] = figure.subplots(1, len(names), sharey=True, squeeze=False).ravel().tolist()
    classes = found.network.fare_classes
    shades = mpl.colormaps["cividis"](np.linspace(0.05, 0.95, len(classes)))
    for axes, name in zip(panels, names, strict=True):
        booked = found.tallies[name].built_up.mean(axis=0).cumsum(axis=1)
        booked = np.concatenate([np.zeros((len(classes), 1)), booked], axis=1)
        axes.stackplot(days, booked, colors=list(shades), labels=classes, linewidth=0)
        axes.set_title(name, loc="left", color=INK)
        axes.set_xlabel("days after the snapshot")
        _bare(axes)
    panels[0].set_ylabel("passengers booked")
    panels[-1].legend(title="fare class", loc="center left", bbox_to_anchor=(1.0, 0.5), frameon=False, reverse=True)
    return _svg(figure)


def price_picture(found: Simulation) -> str:
    """Mean value of the last seat over time on the legs followed, by control."""
    traces = list(found.traces.items())
    names = list(dict.fromkeys(name for _, trace in traces for name in trace.price))
    columns = min(len(traces), 2)
    rows = -(-len(traces) // columns)
    figure = Figure(figsize=(5.0 * columns + 1.6, 3.0 * rows), layout="constrained")
    panels: list[Axes] = figure.subplots(rows, columns, squeeze=False).ravel().tolist()
    for axes, (leg, trace) in zip(panels, traces, strict=False):
        for k, name in enumerate(names):
            if name in trace.price:
                width = 2.0 if name in (BASELINE, "curves") else 1.1
                axes.plot(trace.days, trace.price[name], color=LINES[k % len(LINES)], linewidth=width, label=name)
        axes.set_xlim(max(float(trace.days[0]), SOON), 0.0)
        axes.set_ylim(bottom=0.0)
        axes.set_title(leg, loc="left", color=INK)
        axes.set_xlabel("days before departure")
        axes.set_ylabel(f"last seat, {found.network.currency}")
        _bare(axes)
    for axes in panels[len(traces) :]:
        axes.set_axis_off()
    panels[columns - 1].legend(loc="upper left", bbox_to_anchor=(1.0, 1.0), frameon=False)
    return _svg(figure)


def _sheet(width: float, height: float) -> tuple[Figure, Axes]:
    figure = Figure(figsize=(width, height), layout="constrained")
    axes = figure.subplots()
    _bare(axes)
    return figure, axes


def _bare(axes: Axes) -> None:
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    axes.tick_params(colors=INK)


def _svg(figure: Figure) -> str:
    """SVG element without date or random names, so that the same figures give the same text."""
    text = io.StringIO()
    # A context would have to be given literal keys to please type checkers that know all of them.
    with mpl.rc_context(), warnings.catch_warnings():
        mpl.rcParams["svg.hashsalt"] = "legworth"
        mpl.rcParams["svg.fonttype"] = "none"
        mpl.rcParams["text.parse_math"] = False
        warnings.filterwarnings("ignore", message="Glyph .* missing from font")
        figure.savefig(text, format="svg", metadata={"Date": None, "Creator": None})
    found = text.getvalue()
    return found[found.index("<svg") :]
