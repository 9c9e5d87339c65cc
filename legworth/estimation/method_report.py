"""The methods side by side as rows, as sentences and as a part of the document."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from rich.table import Table

from legworth.estimation.method_comparison import BOOKED, ESTIMATE, MethodComparison, MethodMean

__all__ = ["LABELS", "method_notes", "method_rows", "methods_as_json", "methods_table", "share_rows"]

LABELS = {
    BOOKED: "as booked",
    "ignore": "closing ignored",
    "discard": "closed left out",
    "replace": "mean of the open",
    "projection": "projection",
    "normal": "normal, EM",
    "poisson": "Poisson, EM",
    "negative_binomial": "neg. binomial, EM",
    ESTIMATE: "estimate",
}
"""What the lines are called where people read them."""

CLASSES_SHOWN = 8
"""Most classes that the screen has room for; the page has all."""


def methods_as_json(found: MethodComparison | None) -> dict[str, Any] | None:
    """Return the comparison as a part of the document; None where there is none."""
    if found is None:
        return None
    return {
        "departures": found.departures,
        "left_out": found.left_out,
        "half_life": found.half_life,
        "intervals": found.intervals,
        "closed_intervals": found.closed,
        "closed_without_bookings": found.closed_unbooked,
        "samples": found.groups,
        "pooled_samples": found.pooled,
        "never_open": list(found.never_open),
        "lines": [_line(found, line) for line in found.lines],
        "notes": method_notes(found),
    }


def _line(found: MethodComparison, line: MethodMean) -> dict[str, Any]:
    by_class, in_all = found.above_bookings(line)
    return {
        "method": line.method,
        "mean": _known(line.every),
        "above_bookings": _known(in_all),
        "by_class": [
            {"fare_class": name, "mean": _known(mean), "above_bookings": _known(above)}
            for name, mean, above in zip(found.fare_classes, line.by_class.tolist(), by_class.tolist(), strict=True)
        ],
        "rounds": line.rounds,
        "unsettled_samples": line.unsettled,
    }


def method_notes(found: MethodComparison) -> list[str]:
    """Say in sentences what was compared, how it went, and what to beware of."""
    return [*_compared(found), *_fared(found), *(_BEWARE if found.closed else ())]


_BEWARE = (
    "Projection and the EM methods fill a closed interval of b bookings with the mean (projection: the median) of "
    "demand of at least b, which is never below that of all demand and above it from the first booking on; where a "
    "class closes on the bookings of others, as under leg control, its own demand in closed intervals is no higher on "
    "that account, so they are filled too high.",
    "Against that, the busiest products and dates tend to close first, and one sample of all of them fills theirs too "
    "low; which error is larger cannot be seen from the history.",
)


def _compared(found: MethodComparison) -> list[str]:
    age = "alike" if found.half_life is None else f"by its age as in the estimate (half at {found.half_life:g} days)"
    late = f"; {found.left_out:,} more whose readings end early are left out" if found.left_out else ""
    own = (
        f"{found.pooled:,} of them never open throughout, which take the mean of all intervals of their class"
        if found.pooled
        else "each with intervals that were open throughout"
    )
    return [
        f"Mean whole demand of a departure of a product, over the same {found.departures:,} departures of products "
        f"that have left, each counted {age}{late}.",
        f"{found.closed:,} of {found.intervals:,} intervals between readings ({found.closed / found.intervals:.1%}) "
        f"were closed, for a part at least; {found.closed_unbooked:,} of these hold no booking.",
        f"A method takes every interval of a class as one sample of all products and dates, {found.groups:,} "
        f"samples in all, {own}.",
    ]


def _fared(found: MethodComparison) -> list[str]:
    unsettled = [line for line in found.lines if line.unsettled]
    told = [
        f"{LABELS[line.method]}: {line.unsettled:,} samples had not settled after {line.rounds:,} rounds; its "
        "figures are those reached by then."
        for line in unsettled
    ]
    if not unsettled:
        told.append(f"All iterations settled, after {max(line.rounds for line in found.lines):,} rounds at most.")
    if found.never_open:
        one = len(found.never_open) == 1
        told.append(
            f"{'Class' if one else 'Classes'} {', '.join(found.never_open)} {'was' if one else 'were'} closed, for a "
            "part at least, in every interval: the methods have no figure, and no line counts such departures in its "
            "mean of all classes."
        )
    return told


def method_rows(found: MethodComparison) -> list[tuple[str, ...]]:
    """Rows of the table of means: label, passengers in all, how far above bookings, and passengers by class."""
    digits = _digits(found)
    rows = []
    for line in found.lines:
        means = tuple(_passengers(mean, digits) for mean in (line.every, *line.by_class.tolist()))
        above = "" if line.method == BOOKED else _signed(found.above_bookings(line)[1])
        rows.append((LABELS[line.method], means[0], above, *means[1:]))
    return rows


def share_rows(found: MethodComparison) -> list[tuple[str, ...]]:
    """Rows of the table against bookings: label, in all and by class, rounds made and samples not settled."""
    rows = []
    for line in found.lines[1:]:
        by_class, in_all = found.above_bookings(line)
        made = (f"{line.rounds:,}", f"{line.unsettled:,}") if line.rounds else ("", "")
        rows.append((LABELS[line.method], *(_signed(share) for share in (in_all, *by_class.tolist())), *made))
    return rows


def methods_table(found: MethodComparison) -> Table:
    """Table of means for the screen."""
    shown = Table(title="The same history by other methods: mean demand of a departure", title_justify="left")
    shown.add_column("Method")
    classes = found.fare_classes if len(found.fare_classes) <= CLASSES_SHOWN else ()
    for heading in ("All", "Against bookings", *classes):
        shown.add_column(heading, justify="right")
    for row in method_rows(found):
        shown.add_row(*row[: 3 + len(classes)])
    return shown


def _known(value: float) -> float | None:
    return None if math.isnan(value) else float(value)


def _digits(found: MethodComparison) -> int:
    """Decimals that show two digits of the least mean booked, from 2 to 4."""
    booked = found.booked.by_class[found.booked.by_class > 0]
    least = float(np.min(booked, initial=1.0))
    return min(max(1 - math.floor(math.log10(least)), 2), 4)


def _passengers(mean: float, digits: int) -> str:
    return "" if math.isnan(mean) else f"{mean:,.{digits}f}"


def _signed(share: float) -> str:
    return "" if math.isnan(share) else f"{round(share, 3) + 0.0:+.1%}"
