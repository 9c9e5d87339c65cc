"""The drawing of the map."""

from __future__ import annotations

import re

import pytest

from legworth.service.pages.map_drawing import draw_routes


def test_north_is_up_east_is_right_and_the_date_line_does_not_tear() -> None:
    places = {"A": ("A", -17.0, 178.0), "B": ("B", -14.0, -171.0), "C": ("C", -9.0, 160.0)}
    drawing = draw_routes(places, [("A", "B"), ("B", "A"), ("A", "C")])
    a, b, c = (drawing.places[name] for name in "ABC")
    assert c.x < a.x < b.x
    assert a.y > b.y > c.y
    # Great distances keep their proportion: 18 degrees west of A against 11 degrees east of it.
    assert (a.x - c.x) / (b.x - a.x) == pytest.approx(18 / 11, rel=1e-2)


def test_legs_of_a_pair_are_apart_and_lean_to_the_right() -> None:
    places = {"A": ("A", 0.0, 0.0), "B": ("B", 0.0, 10.0), "C": ("C", 5.0, 5.0)}
    legs = [("A", "B")] * 3 + [("B", "A")] * 2 + [("A", "C")]
    drawing = draw_routes(places, legs)
    middles = [[float(n) for n in re.findall(r"-?[\d.]+", ribbon.d)][3] for ribbon in drawing.ribbons]
    assert len(set(middles[:5])) == 5
    y = drawing.places["A"].y
    assert all(middle > y for middle in middles[:3])
    assert all(middle < y for middle in middles[3:5])


def test_stations_without_coordinates_stand_in_a_row_below() -> None:
    drawing = draw_routes({"A": ("A", 1.0, 1.0), "B": ("B", None, None)}, [("A", "B"), ("B", "Z")])
    assert drawing.places["A"].located
    assert not drawing.places["B"].located
    assert not drawing.places["Z"].located
    assert drawing.places["B"].y == drawing.places["Z"].y > drawing.places["A"].y
    assert draw_routes({}, []).ribbons == ()
