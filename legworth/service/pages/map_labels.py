"""Names of stations on a map: each stands beside its station, or where that is full, at the end of a line to it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from math import cos, hypot, pi, sin

__all__ = ["NARROW", "WIDE", "Label", "Lettering", "place_labels"]

DOT = 4.5
"""Radius of a station."""
LONGEST = 14
"""Letters of a name on the map; a longer one is cut, and stands whole in the list of stations."""
DIRECTIONS = 16
APART = 10.0
"""Steps in which room is looked for farther and farther away."""

_Box = tuple[float, float, float, float]


@dataclass(frozen=True)
class Lettering:
    """How large names are written, in units of the plane."""

    size: float

    @property
    def letter(self) -> float:
        """Width of a capital letter of a plain type, with the gap to the next."""
        return 0.72 * self.size

    @property
    def line(self) -> float:
        """Height of a line."""
        return 1.15 * self.size

    @property
    def descent(self) -> float:
        """Part of it below the letters' feet."""
        return 0.22 * self.size


WIDE, NARROW = Lettering(14.0), Lettering(25.0)
"""Names where the plane is about as wide as its units, and on a phone, where it shrinks to a third."""


@dataclass(frozen=True)
class Label:
    """A name on the plane.

    Attributes
    ----------
    text, x, y, anchor
        What is written, where its feet stand, and which end of it that is: ``start``, ``middle`` or ``end``.
    line
        SVG path from the station to a name that stands apart; empty beside the station.
    box
        Room that it takes: left, top, right, bottom.
    """

    text: str
    x: float
    y: float
    anchor: str
    line: str
    box: _Box


def place_labels(
    places: Mapping[str, tuple[float, float]], width: float, height: float, lettering: Lettering
) -> dict[str, Label]:
    """Write every name where it covers no station and no other name, as near to its station as there is room.

    Parameters
    ----------
    places
        Places of the stations by name; the first have the first choice.
    width, height
        Size of the plane.
    lettering
        How large names are written.

    Returns
    -------
    dict
        A label for every station; only where the whole plane is full does one lie over others.
    """
    taken: list[_Box] = [(x - DOT, y - DOT, x + DOT, y + DOT) for x, y in places.values()]
    found: dict[str, Label] = {}
    for name, (x, y) in places.items():
        choices = list(_beside(name, x, y, lettering))
        label = next((each for each in choices if _free(each.box, width, height, taken)), None)
        if label is None:
            away = _apart(name, x, y, hypot(width, height), lettering)
            label = next((each for each in away if _free(each.box, width, height, taken)), choices[x > width / 2])
        taken.append(label.box)
        found[name] = label
    return found


def _beside(name: str, x: float, y: float, lettering: Lettering) -> Iterator[Label]:
    """Right and left of a station, above and below it, and in its four corners."""
    unit = lettering.size / 14.0
    for anchor, right, down in (
        ("start", 8.0, 5.0),
        ("end", -8.0, 5.0),
        ("middle", 0.0, -9.0),
        ("middle", 0.0, 20.0),
        ("start", 6.0, -5.0),
        ("start", 6.0, 15.0),
        ("end", -6.0, -5.0),
        ("end", -6.0, 15.0),
    ):
        yield _label(name, x + right * unit, y + down * unit, anchor, lettering)


def _apart(name: str, x: float, y: float, farthest: float, lettering: Lettering) -> Iterator[Label]:
    """Farther and farther away, all around, at the end of a line."""
    half = lettering.letter * len(_short(name)) / 2
    distance = 1.2 * lettering.size
    while distance < farthest:
        for number in range(DIRECTIONS):
            angle = 2 * pi * number / DIRECTIONS
            middle = x + cos(angle) * (distance + half)
            feet = y + sin(angle) * (distance + lettering.line / 2) + lettering.line / 2 - lettering.descent
            plain = _label(name, middle, feet, "middle", lettering)
            left, top, right, bottom = plain.box
            end = min(max(x, left), right), min(max(y, top), bottom)
            line = f"M{x:.1f} {y:.1f}L{end[0]:.1f} {end[1]:.1f}"
            yield Label(plain.text, plain.x, plain.y, plain.anchor, line, plain.box)
        distance += APART


def _label(name: str, x: float, y: float, anchor: str, lettering: Lettering) -> Label:
    text = _short(name)
    width = lettering.letter * len(text)
    left = x - {"start": 0.0, "middle": width / 2, "end": width}[anchor]
    box = (left, y + lettering.descent - lettering.line, left + width, y + lettering.descent)
    return Label(text, round(x, 1), round(y, 1), anchor, "", box)


def _short(name: str) -> str:
    return name if len(name) <= LONGEST else f"{name[: LONGEST - 1]}\u2026"


def _free(box: _Box, width: float, height: float, taken: list[_Box]) -> bool:
    """Whether a box lies on the plane, and over no other one."""
    left, top, right, bottom = box
    if left < 0 or top < 0 or right > width or bottom > height:
        return False
    return not any(left < other[2] and other[0] < right and top < other[3] and other[1] < bottom for other in taken)
