"""Pictures of the report: SVG that knows light and dark, as data that stands in the page itself."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.artist import Artist
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import FuncFormatter, MaxNLocator

from legworth.refresh.changes_causes import How
from legworth.refresh.changes_prices import DateMoves, PriceMove
from legworth.refresh.changes_words import STEPS, rounded_steps, signed
from legworth.themed_svg import INK, LINE, Picture, bare_axes, svg_data

__all__ = ["calendar_picture", "cause_picture"]

LABELS = {
    "seats": "seats sold, added or taken away",
    "demand": "demand to come for the leg",
    "fares": "fares on the leg",
    "neighbours": "rest of the network",
}
# Colours are drawn once and named, so that a style sheet inside the picture can turn them for dark screens.
COLOURS = {
    "seats": ("#1c5d99", "#7db8ee"),
    "demand": ("#a85d00", "#f0ac52"),
    "fares": ("#6b3fa0", "#c3a2f0"),
    "neighbours": ("#6c727a", "#a4abb4"),
    "rise": ("#a33a1d", "#f0937a"),
    "fall": ("#14705d", "#62c4ae"),
}
LIGHT = {name: light for name, (light, _) in COLOURS.items()}
SHOWN, SHOWN_NARROW = 12, 8
MOST_BARS = 92
"""Dates shown one by one; longer calendars are shown by week."""


def cause_picture(moves: Sequence[PriceMove], currency: str) -> Picture | None:
    """Draw the largest explained moves as bars of their four causes; None if none is explained."""
    explained = [move for move in moves if move.cause.how is not How.NOT]
    if not explained:
        return None
    wide, narrow = explained[:SHOWN], explained[:SHOWN_NARROW]
    about = f"Bars of the {len(wide)} largest price moves by cause, {currency} a seat; the table below has the figures."
    return Picture(_causes(wide, currency, 8.6), _causes(narrow, currency, 3.9), about)


def calendar_picture(dates: Sequence[DateMoves], currency: str) -> Picture | None:
    """Draw by date of departure the money by which seats rose and fell; None if no price moved."""
    if not any(date.moved for date in dates):
        return None
    about = (
        f"Bars by date of departure: {currency} by which the seats left became dearer, upwards, and cheaper, downwards."
    )
    return Picture(_calendar(dates, currency, 8.6), _calendar(dates, currency, 3.9), about)


def _causes(moves: Sequence[PriceMove], currency: str, width: float) -> str:
    place = np.arange(len(moves))[::-1]
    figure = Figure(figsize=(width, 1.5 + 0.36 * len(moves)), layout="constrained")
    axes = figure.subplots()
    effects = np.array([rounded_steps(move) for move in moves])
    # Causes that pull one way are stacked on that side of nothing.
    for sign in (1, -1):
        side = np.maximum(sign * effects, 0.0)
        begin = np.cumsum(side, axis=1) - side
        for k, name in enumerate(STEPS):
            axes.barh(place, sign * side[:, k], left=sign * begin[:, k], height=0.62, color=LIGHT[name], linewidth=0)
    axes.plot([move.move for move in moves], place, "D", color=INK[0], markersize=5, linestyle="none")
    axes.axvline(0.0, color=LINE[0], linewidth=0.8)
    axes.set_yticks(place, [_label(move, narrow=width < 6) for move in moves])
    axes.set_ylim(-0.6, len(moves) - 0.4)
    axes.set_xlabel(f"change of the bid price, {currency} a seat")
    axes.xaxis.set_major_locator(MaxNLocator(4 if width < 6 else 8))
    axes.margins(x=0.04)
    decimals = 0 if np.abs(effects).max() >= 8 else 2
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: signed(value, decimals)))
    used = [k for k in range(len(STEPS)) if np.any(effects[:, k])]
    handles: list[Artist] = [Patch(color=LIGHT[STEPS[k]], label=LABELS[STEPS[k]]) for k in used]
    handles.append(Line2D([], [], color=INK[0], marker="D", linestyle="none", label="whole move"))
    figure.legend(handles=handles, loc="outside upper left", ncols=1 if width < 6 else 3, frameon=False)
    bare_axes(axes)
    return svg_data(figure, COLOURS)


def _label(move: PriceMove, *, narrow: bool) -> str:
    return move.leg if narrow else f"{move.leg}  {move.route}"


def _calendar(dates: Sequence[DateMoves], currency: str, width: float) -> str:
    day = np.array([np.datetime64(date.date, "D") for date in dates])
    up, down = (np.array([getattr(date, name) for date in dates]) for name in ("up", "down"))
    bar = 0.8
    weekly = int((day[-1] - day[0]).astype(np.int64)) >= MOST_BARS
    if weekly:
        week = (day - day[0]).astype(np.int64) // 7
        day = day[0] + 7 * np.arange(week[-1] + 1) + 3
        up, down, bar = np.bincount(week, weights=up), np.bincount(week, weights=down), 5.6
    figure = Figure(figsize=(width, 2.6), layout="constrained")
    axes = figure.subplots()
    axes.bar(day, up, width=bar, color=LIGHT["rise"], linewidth=0, label="dearer")
    axes.bar(day, -down, width=bar, color=LIGHT["fall"], linewidth=0, label="cheaper")
    axes.axhline(0.0, color=LINE[0], linewidth=0.8)
    ticks = day[np.unique(np.linspace(0, len(day) - 1, 3 if width < 6 else 7).round().astype(np.int64))]
    axes.set_xticks(ticks, [date.strftime("%d %b %Y" if weekly else "%d %b") for date in ticks.tolist()])
    axes.yaxis.set_major_locator(MaxNLocator(4))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: signed(value, 0)))
    axes.set_xlabel("week of departure" if weekly else "date of departure")
    figure.legend(loc="outside upper left", ncols=2, frameon=False, title=f"price moves times seats left, {currency}")
    bare_axes(axes)
    return svg_data(figure, COLOURS)
