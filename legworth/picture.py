"""The picture of the comparison: every leg under both controls, and the disagreements by money."""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import TYPE_CHECKING, Any

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator

from legworth.connection import ConnectionStudy
from legworth.pricing import PricedNetwork
from legworth.report import largest_disagreements
from network import Network, SettingError, counted

if TYPE_CHECKING:
    from matplotlib.typing import RcKeyType

__all__ = ["draw_comparison", "draw_parties"]

NETWORK_SELLS = "#0b6e6e"
LEG_SELLS = "#c8641e"
QUIET = "#6b7280"
MOST_PANELS = 12
LOOK: dict[RcKeyType, Any] = {
    "font.size": 9,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "text.parse_math": False,
}


def draw_comparison(priced: PricedNetwork, path: Path, top: int) -> None:
    """Draw bid price against leg value, one point a leg, and the ``top`` disagreements, into a PNG file.

    Raises
    ------
    SettingError
        If the file cannot be written.
    """
    with mpl.rc_context(LOOK):
        figure = Figure(figsize=(13, max(5.5, 1.6 + 0.3 * top)), layout="constrained")
        legs, money = figure.subplots(1, 2, width_ratios=[1, 1.25])
        _draw_legs(legs, priced)
        _draw_disagreements(money, priced, top)
        title = f"{priced.network.name}: {priced.summary['method']} bid prices against leg-level control"
        figure.suptitle(title, fontweight="bold")
        _save(figure, path)


def draw_parties(network: Network, studies: list[ConnectionStudy], path: Path) -> None:
    """Draw what a party displaces by its size, exactly and by bid prices, one panel an itinerary, into a PNG file.

    Raises
    ------
    SettingError
        If there is nothing to draw or the file cannot be written.
    """
    shown = [study for study in studies if study.parties][:MOST_PANELS]
    if not shown:
        raise SettingError("no party fits into the seats left, so there is nothing to draw; leave --picture out")
    columns = min(len(shown), 3)
    rows = -(-len(shown) // columns)
    with mpl.rc_context(LOOK):
        figure = Figure(figsize=(5 * columns, 3.6 * rows), layout="constrained")
        panels: list[Axes] = figure.subplots(rows, columns, squeeze=False).ravel().tolist()
        for axes, study in zip(panels, shown, strict=False):
            size = [line.seats for line in study.parties]
            axes.plot(size, [line.least_fare for line in study.parties], color=NETWORK_SELLS, marker="o", markersize=3)
            bid_price = [line.by_bid_price / line.seats for line in study.parties]
            axes.plot(size, bid_price, color=LEG_SELLS, linestyle="--")
            highest = max(line.least_fare for line in study.parties)
            axes.set(ylim=(0, 1.15 * highest or 1), title=study.itinerary, xlabel="passengers in the party")
            axes.xaxis.set_major_locator(MaxNLocator(integer=True))
            axes.set_ylabel(f"least fare for one passenger, {network.currency}")
            axes.legend(["exact displacement", "sum of bid prices"], loc="lower right", frameon=False)
        for axes in panels[len(shown) :]:
            axes.set_axis_off()
        _save(figure, path)


def _save(figure: Figure, path: Path) -> None:
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with warnings.catch_warnings():
            # A name in letters that the font lacks is drawn as boxes; the tables hold it in full.
            warnings.filterwarnings("ignore", message="Glyph .* missing from font")
            figure.savefig(path, dpi=130, format="png")
    except OSError as error:
        raise SettingError(f"cannot write {path} ({error.strerror}); name another file with --picture") from error


def _draw_legs(axes: Axes, priced: PricedNetwork) -> None:
    network, comparison = priced.network, priced.tables["comparison"]
    bid_price = comparison["bid_price"].to_numpy()
    leg_value = comparison["leg_seat_value"].to_numpy()
    size = 12 + 60 * network.remaining / max(int(network.remaining.max(initial=1)), 1)
    above = bid_price >= leg_value
    for chosen, colour, label in (
        (above, LEG_SELLS, "bid price above the leg's own value"),
        (~above, NETWORK_SELLS, "bid price below the leg's own value"),
    ):
        axes.scatter(
            leg_value[chosen],
            bid_price[chosen],
            s=size[chosen],
            color=colour,
            alpha=0.55,
            linewidths=0,
            label=f"{label} ({counted(chosen.sum(), 'leg')})",
        )
    end = float(max(bid_price.max(initial=0), leg_value.max(initial=0), 1)) * 1.05
    axes.plot([0, end], [0, end], color=QUIET, linewidth=1, linestyle="--")
    axes.set(xlim=(0, end), ylim=(0, end), aspect="equal")
    axes.set_xlabel(f"value of the last seat by leg-level EMSR-b, {network.currency}")
    axes.set_ylabel(f"bid price: value of the last seat to the network, {network.currency}")
    axes.set_title("One point a leg, larger with more seats left", loc="left")
    axes.legend(loc="upper left", frameon=False)


def _draw_disagreements(axes: Axes, priced: PricedNetwork, top: int) -> None:
    rows = largest_disagreements(priced, top)
    axes.set_title(f"Where most money hangs on the disagreement, {priced.network.currency}", loc="left")
    if not rows:
        axes.text(0.5, 0.5, "no disagreement", ha="center", va="center", transform=axes.transAxes, color=QUIET)
        axes.set_axis_off()
        return
    place = np.arange(len(rows))[::-1]
    stake = np.array([row["at_stake"] for row in rows])
    network_sells = np.array([row["disagreement"] == "network_only" for row in rows])
    for chosen, colour in ((network_sells, NETWORK_SELLS), (~network_sells, LEG_SELLS)):
        axes.barh(place[chosen], stake[chosen], color=colour, height=0.7)
    axes.set_yticks(place, [f"{row['route']}  class {row['fare_class']}  {row['itinerary']}" for row in rows])
    axes.set_xlabel("contribution lost per passenger times passengers expected")
    handles = [Patch(color=NETWORK_SELLS), Patch(color=LEG_SELLS)]
    axes.legend(
        handles, ["network sells, leg control refuses", "leg control sells, network refuses"], loc="lower right"
    )
