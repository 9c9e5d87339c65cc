"""The report as one HTML page that holds its pictures and needs nothing else, neither a script nor another host."""

from __future__ import annotations

from functools import cache

from jinja2 import Template

from legworth.page_templates import page_templates
from legworth.refresh.changes import Changes
from legworth.refresh.changes_causes import How
from legworth.refresh.changes_lines import first_lines
from legworth.refresh.changes_night_tables import check_table, departure_tables, revenue_table, seconds_table
from legworth.refresh.changes_pictures import calendar_picture, cause_picture
from legworth.refresh.changes_tables import dispute_tables, flip_tables, move_table
from legworth.refresh.changes_words import cause_sentence, count_of, shown_move, signed
from legworth.report import CAUTION, money, price_text

__all__ = ["changes_page"]

TOLD = 8
"""Moves told in sentences; all stand in the table."""


def changes_page(changes: Changes) -> str:
    """Write the page.

    Parameters
    ----------
    changes
        What `legworth.refresh.changes.find_changes` found.

    Returns
    -------
    str
        HTML in UTF-8.
    """
    currency = changes.tonight.currency
    moves = changes.prices.moves if changes.prices is not None else ()
    lines = first_lines(changes)
    return _template().render(
        changes=changes,
        currency=currency,
        lines=lines,
        note="" if any(changes.note in line.text for line in lines) else changes.note,
        told=[(move, shown_move(move), cause_sentence(move, currency)) for move in moves[:TOLD]],
        causes=cause_picture(moves, currency),
        calendar=calendar_picture(changes.prices.dates, currency) if changes.prices is not None else None,
        moves=move_table(moves, currency) if moves else None,
        how_told=_how_told(changes),
        flips=flip_tables(changes),
        disputes=dispute_tables(changes),
        departures=departure_tables(changes),
        revenue=revenue_table(changes),
        checks=check_table(changes.run.checks) if changes.run is not None else None,
        seconds=seconds_table(changes),
        caution=CAUTION,
    )


@cache
def _template() -> Template:
    environment = page_templates("legworth")
    environment.filters.update(money=money, price=price_text, signed=signed)
    environment.globals.update(count_of=count_of)
    return environment.get_template("changes.html")


def _how_told(changes: Changes) -> str:
    """Say for how many moves the causes were found, and how."""
    moves = changes.prices.moves if changes.prices is not None else ()
    if not moves:
        return ""
    assert changes.prices is not None
    total = changes.prices.rose + changes.prices.fell
    count = {how: sum(move.cause.how is how for move in moves) for how in How}
    parts = [f"{count[How.PART]:,} by solving the part again"]
    parts += [f"{count[How.LEG]:,} to first order on the leg alone"] * (count[How.LEG] > 0)
    which = "the largest moves only" if total > len(moves) else "every move"
    text = f"Causes were looked for behind {which}: {' and '.join(parts)}."
    if count[How.NOT]:
        text += f" For {count_of(count[How.NOT], 'move')} listed they could not be told apart."
    if total > len(moves):
        text += f" The other {count_of(total - len(moves), 'move')} were not looked into."
    return text
