"""Counted nouns for messages: ``1 leg``, ``2 legs``, ``1,200 itineraries``."""

from __future__ import annotations

__all__ = ["counted"]


def counted(number: float, noun: str, several: str | None = None) -> str:
    """Say how many there are of something.

    Parameters
    ----------
    number
        How many; shown whole, thousands apart.
    noun
        The word for one.
    several
        The word for any other number; by the common rules of English if left out.

    Examples
    --------
    >>> counted(1, "leg"), counted(0, "leg"), counted(1200, "itinerary"), counted(2, "fare class")
    ('1 leg', '0 legs', '1,200 itineraries', '2 fare classes')
    >>> counted(2, "row of demand", "rows of demand"), counted(3, "day")
    ('2 rows of demand', '3 days')
    """
    whole = round(number)
    return f"{whole:,} {noun if whole == 1 else several or _several(noun)}"


def _several(noun: str) -> str:
    if noun.endswith("y") and noun[-2:-1] not in "aeiou":
        return f"{noun[:-1]}ies"
    return f"{noun}es" if noun.endswith(("s", "x", "ch", "sh")) else f"{noun}s"
