"""Pictures of an estimate: demand to come, booking curves, and how forecasts fared on the past."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator, PercentFormatter, StrMethodFormatter

from legworth.estimation.method_comparison import ESTIMATE, MethodComparison
from legworth.estimation.method_report import LABELS
from legworth.estimation.recipe import Estimated
from legworth.estimation.scores import Score, Scores
from legworth.themed_svg import INK, LINE, Picture, bare_axes, svg_data
from network.arrays import FloatArray

__all__ = [
    "bias_picture",
    "coverage_picture",
    "curve_picture",
    "demand_picture",
    "error_picture",
    "method_picture",
]

WIDE, NARROW = 8.6, 3.9
OWN, LAST_YEAR, AVERAGE, CHANCE = (
    ("#1c5d99", "#7db8ee"),
    ("#a85d00", "#f0ac52"),
    ("#6b3fa0", "#c3a2f0"),
    ("#14705d", "#62c4ae"),
)
BAND = ("#e7eef5", "#233040")
COLOURS = {"own": OWN, "last-year": LAST_YEAR, "average": AVERAGE, "chance": CHANCE, "band": BAND}
MOST_CLASSES = 9
STYLES = ("-", "--", "-.", ":")
"""Of the kinds of market that have curves of their own."""


def _shades(n: int) -> dict[str, tuple[str, str]]:
    """Colours of n classes, best first, for light and for dark screens."""
    names = {}
    for k in range(n):
        place = k / max(n - 1, 1)
        light = mpl.colors.to_hex(mpl.colormaps["viridis"](0.05 + 0.75 * place))
        dark = mpl.colors.to_hex(mpl.colormaps["viridis"](0.35 + 0.63 * place))
        names[f"class-{k}"] = (light, dark)
    return names


def demand_picture(found: Estimated) -> Picture:
    """Draw demand to come by date of departure, classes on top of each other, and seats still for sale."""
    network, departures = found.network, found.departures
    date, dates = _days(departures.date[network.product_itinerary])
    n_classes = len(network.fare_classes)
    total = np.bincount(date * n_classes + network.product_class, network.demand.mean, minlength=len(dates) * n_classes)
    total = total.reshape(len(dates), n_classes)
    shades = _shades(n_classes)

    def draw(width: float) -> str:
        figure, axes = _sheet(width, 3.0)
        bottom = np.zeros(len(dates))
        for k, name in enumerate(network.fare_classes):
            axes.bar(
                dates, total[:, k], bottom=bottom, width=0.85, color=shades[f"class-{k}"][0], linewidth=0, label=name
            )
            bottom += total[:, k]
        _date_ticks(axes, dates, width)
        axes.yaxis.set_major_formatter(StrMethodFormatter("{x:,.0f}"))
        axes.set_ylabel("passengers to come")
        axes.set_xlabel("date of departure")
        figure.legend(loc="outside upper left", ncols=3 if width < 6 else MOST_CLASSES, frameon=False)
        return _svg(figure, shades)

    about = f"Bars of the demand to come on {len(dates)} dates of departure, by fare class."
    return Picture(draw(WIDE), draw(NARROW), about)


def curve_picture(found: Estimated) -> Picture:
    """Draw the fitted booking curves: share of the demand that has come by days before departure."""
    curves = found.network.curves
    used = np.unique(found.network.curve[found.network.curve >= 0])
    n_classes = len(found.network.fare_classes)
    shades = _shades(n_classes)

    def draw(width: float) -> str:
        figure, axes = _sheet(width, 3.2)
        for curve in used.tolist():
            rows = slice(curves.start[curve], curves.start[curve + 1])
            axes.plot(
                np.sqrt(curves.days_before[rows]),
                curves.share[rows],
                color=shades[f"class-{curve % n_classes}"][0],
                linestyle=STYLES[min(curve // n_classes, len(STYLES) - 1)],
                label=str(curves.name[curve]),
            )
        ticks = np.unique(curves.days_before)
        shown = _spread_out(ticks, 6 if width < 6 else 11)
        axes.set_xticks(np.sqrt(shown), [f"{day:g}" for day in shown])
        axes.set_xlim(np.sqrt(ticks.max(initial=1.0)), 0.0)
        axes.set_ylim(0.0, 1.0)
        axes.yaxis.set_major_formatter(PercentFormatter(1.0, decimals=0))
        axes.set_xlabel("days before departure")
        axes.set_ylabel("share of demand that has come")
        figure.legend(loc="outside upper left", ncols=3 if width < 6 else 6, frameon=False)
        return _svg(figure, shades)

    return Picture(
        draw(WIDE), draw(NARROW), f"Lines of {len(used)} booking curves, rising to all of demand at departure."
    )


def error_picture(scores: Scores) -> Picture:
    """Draw the error by horizon: the estimate, its rivals, and what chance alone makes."""
    rows = scores.by_horizon
    lines: list[tuple[str, str, Callable[[Score], float | None]]] = [
        ("average of all departures", "average", lambda row: row.error_average),
        ("same week of last year", "last-year", lambda row: row.error_last_year),
        ("estimate", "own", lambda row: row.error_same if row.compared else row.error),
        ("chance alone", "chance", lambda row: row.chance),
    ]

    def draw(width: float) -> str:
        figure, axes = _sheet(width, 3.2)
        place = np.arange(len(rows))
        for label, name, value in lines:
            figures = _figures(rows, value)
            if np.isfinite(figures).any():
                style = "--" if name == "chance" else "-"
                axes.plot(
                    place, figures, color=COLOURS[name][0], linestyle=style, marker="o", markersize=4, label=label
                )
        axes.set_xticks(place, [row.label if width > 6 else row.label.split()[0] for row in rows])
        axes.set_ylim(bottom=0.0)
        axes.yaxis.set_major_formatter(PercentFormatter(1.0, decimals=0))
        axes.set_xlabel("before departure" if width > 6 else "days before departure")
        axes.set_ylabel("error, of passengers")
        figure.legend(loc="outside upper left", ncols=1 if width < 6 else 4, frameon=False)
        return _svg(figure, COLOURS)

    return Picture(
        draw(WIDE), draw(NARROW), "Lines of the forecast error by days before departure; the table has the figures."
    )


def bias_picture(scores: Scores) -> Picture:
    """Draw the bias by fare class, of the estimate and of its rivals."""
    rows = scores.by_class
    marks: list[tuple[str, str, str, Callable[[Score], float | None]]] = [
        ("estimate", "own", "o", lambda row: row.bias_same if row.compared else row.bias),
        ("same week of last year", "last-year", "s", lambda row: row.bias_last_year),
        ("average of all departures", "average", "D", lambda row: row.bias_average),
    ]

    def draw(width: float) -> str:
        figure, axes = _sheet(width, 1.2 + 0.34 * len(rows))
        place = np.arange(len(rows))[::-1]
        axes.axvline(0.0, color=LINE[0], linewidth=1.0)
        for label, name, mark, value in marks:
            figures = _figures(rows, value)
            if np.isfinite(figures).any():
                axes.plot(figures, place, mark, color=COLOURS[name][0], markersize=7, label=label)
        axes.set_yticks(place, [row.label for row in rows])
        axes.set_ylim(-0.6, len(rows) - 0.4)
        axes.xaxis.set_major_locator(MaxNLocator(4 if width < 6 else 8))
        axes.xaxis.set_major_formatter(PercentFormatter(1.0, decimals=0))
        axes.set_xlabel("forecast too low (left) or too high (right)")
        axes.set_ylabel("fare class")
        figure.legend(loc="outside upper left", ncols=1 if width < 6 else 3, frameon=False)
        return _svg(figure, COLOURS)

    return Picture(draw(WIDE), draw(NARROW), "Marks of the bias by fare class; the table below has the figures.")


def coverage_picture(scores: Scores, share: float) -> Picture:
    """Draw the share of outcomes inside the interval by horizon, class and size, on a band around what it should be."""
    rows = [*scores.by_horizon, *scores.by_class, *scores.by_size]
    kinds = ["days"] * len(scores.by_horizon) + ["class"] * len(scores.by_class) + ["size"] * len(scores.by_size)
    labels = [
        row.label if kind == "days" else f"class {row.label}" if kind == "class" else f"{row.label} passengers"
        for row, kind in zip(rows, kinds, strict=True)
    ]

    def draw(width: float) -> str:
        figure, axes = _sheet(width, 0.9 + 0.25 * len(rows))
        place = np.arange(len(rows))[::-1]
        axes.axvspan(share - 0.05, share + 0.05, color=BAND[0], linewidth=0)
        axes.axvline(share, color=LINE[0], linewidth=1.0)
        axes.plot(_figures(rows, lambda row: row.coverage), place, "o", color=OWN[0], markersize=6)
        axes.set_yticks(place, labels)
        axes.set_ylim(-0.7, len(rows) - 0.3)
        axes.set_xlim(max(0.0, share - 0.3), min(1.0, share + 0.2))
        axes.xaxis.set_major_locator(MaxNLocator(5))
        axes.xaxis.set_major_formatter(PercentFormatter(1.0, decimals=0))
        axes.set_xlabel(f"outcomes inside the {share:.0%} interval")
        return _svg(figure, COLOURS)

    about = f"Points of the share of outcomes inside the {share:.0%} interval; the table below has the figures."
    return Picture(draw(WIDE), draw(NARROW), about)


METHOD_MARKS = {
    "discard": ("average", "v"),
    "replace": ("average", "^"),
    "projection": ("last-year", "s"),
    "normal": ("last-year", "D"),
    "poisson": ("chance", "<"),
    "negative_binomial": ("chance", ">"),
    ESTIMATE: ("own", "o"),
}
"""Colour and mark of every method: those of a colour are of one kind: naive, of normal demand, of counts."""


def method_picture(found: MethodComparison) -> Picture:
    """Draw by class how far methods and estimate are above bookings."""
    names = ("all", *found.fare_classes)

    def draw(width: float) -> str:
        figure, axes = _sheet(width, 1.2 + 0.34 * len(names) + (0.3 if width < 6 else 0.0))
        place = np.arange(len(names))[::-1]
        axes.hlines(place, 0.0, 1.0, transform=axes.get_yaxis_transform(), color=BAND[0], linewidth=1.0, zorder=0)
        axes.axvline(0.0, color=LINE[0], linewidth=1.0)
        for method, (colour, mark) in METHOD_MARKS.items():
            by_class, in_all = found.above_bookings(found.line(method))
            figures = np.append(in_all, by_class)
            if np.isfinite(figures).any():
                size = 8 if method == ESTIMATE else 6
                axes.plot(figures, place, mark, color=COLOURS[colour][0], markersize=size, label=LABELS[method])
        axes.set_yticks(place, names)
        axes.set_ylim(-0.6, len(names) - 0.4)
        axes.xaxis.set_major_locator(MaxNLocator(4 if width < 6 else 8))
        axes.xaxis.set_major_formatter(PercentFormatter(1.0, decimals=0))
        axes.set_xlabel("mean demand above what was booked")
        axes.set_ylabel("fare class")
        if axes.get_legend_handles_labels()[0]:
            figure.legend(loc="outside upper left", ncols=2 if width < 6 else 4, frameon=False)
        return _svg(figure, COLOURS)

    about = "Marks by fare class of how far methods are above bookings; the table below has the figures."
    return Picture(draw(WIDE), draw(NARROW), about)


def _figures(rows: Sequence[Score], value: Callable[[Score], float | None]) -> FloatArray:
    found = [value(row) for row in rows]
    return np.array([np.nan if figure is None else figure for figure in found], dtype=np.float64)


def _days(dates: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    known, place = np.unique(dates.astype("datetime64[D]"), return_inverse=True)
    return place, known


def _spread_out(ticks: FloatArray, most: int) -> FloatArray:
    """Some of the ticks, none closer to the next than their number allows on a square-root axis."""
    kept: list[float] = []
    room = float(np.sqrt(ticks.max(initial=1.0))) / most
    for tick in ticks.tolist():
        if not kept or np.sqrt(tick) - np.sqrt(kept[-1]) >= room:
            kept.append(tick)
    return np.array(kept)


def _date_ticks(axes: Axes, dates: np.ndarray, width: float) -> None:
    ticks = dates[np.unique(np.linspace(0, len(dates) - 1, 3 if width < 6 else 7).round().astype(np.int64))]
    axes.set_xticks(ticks, [date.strftime("%d %b") for date in ticks.tolist()])
    axes.yaxis.set_major_locator(MaxNLocator(5))


def _sheet(width: float, height: float) -> tuple[Figure, Axes]:
    figure = Figure(figsize=(width, height), layout="constrained")
    return figure, figure.subplots()


def _svg(figure: Figure, colours: dict[str, tuple[str, str]]) -> str:
    for axes in figure.axes:
        bare_axes(axes)
    for legend in figure.legends:
        for text in legend.get_texts():
            text.set_color(INK[0])
    return svg_data(figure, colours)
