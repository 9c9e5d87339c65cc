"""Types of options that several commands share."""

from __future__ import annotations

import math
from datetime import datetime
from typing import Any

import click

__all__ = ["MOST_MONEY", "MOST_SEATS", "Figure", "instant"]

MOST_MONEY, MOST_SEATS = 1_000_000_000, 1_000_000
"""Limits of the tables ``fares`` and ``requests``."""

EXAMPLE = "write it as 2027-03-01T06:40+01:00"


class Figure(click.FloatRange):
    """A number within limits; unlike the type it extends, it takes neither NaN nor infinity."""

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float:
        """Read a number; fail if it is none, not finite or out of its limits."""
        number = float(click.FLOAT.convert(value, param, ctx))
        if not math.isfinite(number):
            self.fail(f"{value!r} is not a finite number; give a figure.", param, ctx)
        return float(super().convert(value, param, ctx))


def instant(ctx: click.Context, param: click.Parameter, value: str | None) -> datetime | None:
    """Read an instant, ISO 8601 with offset: the callback of an option."""
    if value is None:
        return None
    try:
        read = datetime.fromisoformat(value)
    except ValueError:
        raise click.BadParameter(f"{value!r} is not a date and time; {EXAMPLE}.", ctx, param) from None
    if read.tzinfo is None:
        raise click.BadParameter(f"{value!r} has no offset from UTC; {EXAMPLE}.", ctx, param)
    return read
