"""The drawing of the map: places, curves, and a name for every station."""

from __future__ import annotations

import re
from itertools import combinations, pairwise
from pathlib import Path

import numpy as np
import pytest

from legworth.service.pages import files
from legworth.service.pages.map_drawing import draw_routes
from legworth.service.pages.map_labels import DOT, LONGEST, NARROW, WIDE, Label, Lettering, place_labels


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


def crowded(seed: int, stations: int, spread: float) -> dict[str, tuple[float, float]]:
    """Stations in a heap in the middle of the plane, two of them at the same place."""
    rng = np.random.default_rng(seed)
    at = np.clip(rng.normal((500.0, 300.0), spread, (stations, 2)), 60.0, (940.0, 540.0))
    at[1] = at[0]
    return {f"S{number:02d}": (float(x), float(y)) for number, (x, y) in enumerate(at)}


def overlap(one: tuple[float, ...], other: tuple[float, ...]) -> bool:
    return one[0] < other[2] and other[0] < one[2] and one[1] < other[3] and other[1] < one[3]


@pytest.mark.parametrize("lettering", [WIDE, NARROW])
@pytest.mark.parametrize(("stations", "spread"), [(2, 1.0), (20, 15.0), (60, 40.0), (120, 200.0)])
def test_every_station_has_its_name_and_no_name_covers_another(
    stations: int, spread: float, lettering: Lettering
) -> None:
    places = crowded(stations, stations, spread)
    labels = place_labels(places, 1000.0, 600.0, lettering)
    assert list(labels) == list(places)
    dots = [(x - DOT, y - DOT, x + DOT, y + DOT) for x, y in places.values()]
    for label in labels.values():
        assert 0 <= label.box[0] < label.box[2] <= 1000 and 0 <= label.box[1] < label.box[3] <= 600
        assert not any(overlap(label.box, dot) for dot in dots)
    assert not any(overlap(a.box, b.box) for a, b in combinations(labels.values(), 2))
    for name, label in labels.items():
        check_line(label, *places[name], lettering)


def check_line(label: Label, x: float, y: float, lettering: Lettering) -> None:
    """A name beside its station needs no line; any other has one, from the station to the edge of the name."""
    nearest = np.clip((x, y), label.box[:2], label.box[2:])
    distance = float(np.hypot(*(nearest - (x, y))))
    if not label.line:
        assert distance <= lettering.size
        return
    begin_x, begin_y, end_x, end_y = (float(number) for number in re.findall(r"-?[\d.]+", label.line))
    assert (begin_x, begin_y) == pytest.approx((x, y), abs=0.06)
    assert (end_x, end_y) == pytest.approx(tuple(nearest), abs=0.06)


def test_a_full_plane_and_long_names_still_get_labels() -> None:
    full = place_labels(crowded(1, 90, 30.0), 200.0, 100.0, NARROW)
    assert len(full) == 90
    long = "A station with a very long name"
    label = place_labels({long: (500.0, 300.0)}, 1000.0, 600.0, WIDE)[long]
    assert label.text == long[: LONGEST - 1] + "\u2026"
    assert label.box[2] <= 1000


def luminance(colour: str) -> float:
    """Relative luminance of an sRGB colour, as WCAG 2.2 defines it (from memory)."""
    channels = [int(colour[at : at + 2], 16) / 255 for at in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return float(np.dot((0.2126, 0.7152, 0.0722), linear))


def contrast(one: str, other: str) -> float:
    """Contrast of two colours, as WCAG 2.2 defines it (from memory)."""
    dark, light = sorted((luminance(one), luminance(other)))
    return (light + 0.05) / (dark + 0.05)


def test_contrast_is_that_of_the_standard() -> None:
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)
    # The lightest grey that passes for text on white, known to every author of pages (common practice).
    assert 4.5 <= contrast("#767676", "#ffffff") < 4.55


@pytest.mark.parametrize("scheme", [0, 1], ids=["light", "dark"])
def test_every_colour_of_the_scale_stands_out_from_what_is_behind_it(scheme: int) -> None:
    """WCAG 2.2, success criterion 1.4.11: 3 to 1 for what is needed to understand a graphic (from memory)."""
    css = (Path(files.__file__).with_name("static") / "pages.css").read_text(encoding="utf-8")
    pairs = re.findall(r"--([\w-]+): light-dark\((#[0-9a-f]{6}), (#[0-9a-f]{6})\)", css)
    colours = {name: both[scheme] for name, *both in pairs}
    steps = [colours[f"c{number}"] for number in range(7)]
    for behind in (colours["band"], colours["ground"]):
        found = [contrast(step, behind) for step in steps]
        assert min(found) >= 3
        # More is always farther from the ground, by steps that can be told apart.
        assert all(after / before > 1.2 for before, after in pairwise(found))
        assert contrast(colours["quiet"], behind) >= 4.5, "the line of legs not on sale, and small print"
        assert contrast(colours["place"], behind) >= 4.5
