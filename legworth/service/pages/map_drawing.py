"""The route graph on a plane: stations by their coordinates, and the legs of a pair as a bundle of curves."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import cos, hypot, isfinite, radians

import numpy as np

from legworth.service.pages.map_labels import NARROW, WIDE, Label, place_labels
from network.arrays import FloatArray

__all__ = ["Drawing", "Place", "Ribbon", "draw_routes"]

WIDTH = 1000.0
LEAST, MOST = 380.0, 760.0
EDGE = 64.0
APART = 7.0
WIDEST = 0.22
"""Greatest distance of a curve from the straight line, as a share of its length."""


@dataclass(frozen=True)
class Place:
    """A station on the plane, and where its name is written.

    Attributes
    ----------
    station, name
        Short and long name.
    x, y
        Place.
    label, narrow_label
        Its short name where the plane is wide, and on a phone, where letters take more room on it.
    legs
        Legs that begin or end there.
    located
        Whether it has coordinates; the others stand in a row below.
    """

    station: str
    name: str
    x: float
    y: float
    label: Label
    narrow_label: Label
    legs: int
    located: bool


@dataclass(frozen=True)
class Ribbon:
    """A leg on the plane: its curve as an SVG path."""

    d: str


@dataclass(frozen=True)
class Drawing:
    """The plane: its size, the stations by name, and one curve a leg, in the order of the legs."""

    width: float
    height: float
    places: dict[str, Place]
    ribbons: tuple[Ribbon, ...]


def draw_routes(
    stations: dict[str, tuple[str, float | None, float | None]], legs: Sequence[tuple[str, str]]
) -> Drawing:
    """Lay out the stations that legs use, and the legs.

    Degrees are taken for a plane, east and west shrunk by the cosine of the middle latitude; longitudes are cut
    where nobody flies, so that a network across the date line stays in one piece.

    Parameters
    ----------
    stations
        Long name, latitude and longitude by short name.
    legs
        Origin and destination of every leg, in their order on the page.
    """
    used = sorted({station for leg in legs for station in leg})
    points, height = _project([stations.get(name, (name, None, None))[1:] for name in used])
    degree = dict.fromkeys(used, 0)
    for leg in legs:
        for station in leg:
            degree[station] += 1
    at = dict(zip(used, points.tolist(), strict=True))
    lost = [name for name in used if not all(map(isfinite, at[name]))]
    if lost:
        height += EDGE
        for place, name in enumerate(lost):
            at[name] = [EDGE + (place + 0.5) * (WIDTH - 2 * EDGE) / len(lost), height - EDGE / 2]
    places: dict[str, Place] = {}
    height = round(height, 1)
    order = {name: (at[name][0], at[name][1]) for name in sorted(used, key=lambda name: (-degree[name], name))}
    labels, narrow = (place_labels(order, WIDTH, height, lettering) for lettering in (WIDE, NARROW))
    for name, (x, y) in order.items():
        long = stations.get(name, (name, None, None))[0]
        written = labels[name], narrow[name]
        places[name] = Place(name, long, round(x, 1), round(y, 1), *written, degree[name], name not in lost)
    return Drawing(WIDTH, height, places, tuple(_ribbons(at, legs)))


def _project(coordinates: Sequence[tuple[float | None, float | None]]) -> tuple[FloatArray, float]:
    """(S, 2) places, NaN where a station has no coordinates, and the height of the plane."""
    degrees = np.array([[np.nan if value is None else value for value in pair] for pair in coordinates], dtype=float)
    degrees = degrees.reshape(-1, 2)
    known = np.isfinite(degrees).all(axis=1)
    if not known.any():
        return np.full(degrees.shape, np.nan), EDGE
    latitude, longitude = degrees[:, 0], _uncut(degrees[:, 1], known)
    middle = (latitude[known].min() + latitude[known].max()) / 2
    east, north = longitude * cos(radians(middle)), latitude
    spans = [float(np.ptp(values[known])) for values in (east, north)]
    room = WIDTH - 2 * EDGE
    scale = min(room / spans[0] if spans[0] else np.inf, (MOST - 2 * EDGE) / spans[1] if spans[1] else np.inf)
    scale = scale if isfinite(scale) else 1.0
    height = float(np.clip(spans[1] * scale + 2 * EDGE, LEAST, MOST))
    x = WIDTH / 2 + (east - (east[known].min() + east[known].max()) / 2) * scale
    y = height / 2 - (north - (north[known].min() + north[known].max()) / 2) * scale
    return np.column_stack([x, y]), height


def _uncut(longitude: FloatArray, known: np.ndarray) -> FloatArray:
    """Longitudes that rise from the east end of the widest empty gap around the globe."""
    around = np.sort(longitude[known] % 360.0)
    gaps = np.diff(np.append(around, around[0] + 360.0))
    start = around[(int(np.argmax(gaps)) + 1) % len(around)]
    return np.asarray(start + (longitude - start) % 360.0, dtype=np.float64)


def _ribbons(at: dict[str, list[float]], legs: Sequence[tuple[str, str]]) -> list[Ribbon]:
    """Curves that lean to the right of the direction of travel, one beside the other."""
    count: dict[tuple[str, str], int] = {}
    for leg in legs:
        count[leg] = count.get(leg, 0) + 1
    place: dict[tuple[str, str], int] = {}
    found = []
    for leg in legs:
        place[leg] = place.get(leg, 0) + 1
        (x0, y0), (x1, y1) = at[leg[0]], at[leg[1]]
        length = hypot(x1 - x0, y1 - y0) or 1.0
        apart = min(APART * 2, 2 * WIDEST * length / count[leg])
        lean = apart * (place[leg] - 0.5)
        right = (-(y1 - y0) / length, (x1 - x0) / length)
        middle = ((x0 + x1) / 2 + right[0] * lean, (y0 + y1) / 2 + right[1] * lean)
        found.append(Ribbon(f"M{x0:.1f} {y0:.1f}Q{middle[0]:.1f} {middle[1]:.1f} {x1:.1f} {y1:.1f}"))
    return found
