"""Charts as plain geometry: scales with round steps, lines and marks in the units of an SVG view box."""

from __future__ import annotations

from dataclasses import dataclass
from math import floor, isfinite, log10

import numpy as np
import numpy.typing as npt

from network.arrays import FloatArray

__all__ = ["Chart", "Line", "Mark", "Scale", "Tick", "round_step"]

WIDTH, HEIGHT = 560, 330
LEFT, RIGHT, TOP, BOTTOM = 62, 14, 14, 48


@dataclass(frozen=True)
class Tick:
    """A place on an axis, and its label."""

    at: float
    label: str


def round_step(span: float, most: int) -> float:
    """Least step of 1, 2 or 5 times a power of ten that cuts a span into at most ``most`` pieces.

    Examples
    --------
    >>> round_step(87.0, 5)
    20.0
    """
    if not (isfinite(span) and span > 0):
        return 1.0
    rough = span / most
    power = 10.0 ** floor(log10(rough))
    return next(float(factor * power) for factor in (1, 2, 5, 10) if factor * power >= rough * (1 - 1e-9))


@dataclass(frozen=True)
class Scale:
    """From figures to places.

    Attributes
    ----------
    low, high
        Ends, in the figure's unit; ``low`` lies at ``start`` and ``high`` at ``end``.
    start, end
        Places in the view box.
    step
        Between ticks.
    """

    low: float
    high: float
    start: float
    end: float
    step: float

    @classmethod
    def across(cls, high: float, *, low: float = 0.0, whole: bool = False, falling: bool = False) -> Scale:
        """Horizontal scale; ``falling`` puts the high end on the left."""
        step = round_step(high - low, 6)
        step = max(step, 1.0) if whole else step
        ends = (WIDTH - RIGHT, LEFT) if falling else (LEFT, WIDTH - RIGHT)
        return cls(low, max(high, low + step), *ends, step)

    @classmethod
    def up(cls, high: float) -> Scale:
        """Vertical scale from nothing up to the next round figure."""
        step = round_step(high, 5)
        top = step * max(1, int(np.ceil(high / step - 1e-9)))
        return cls(0.0, top, HEIGHT - BOTTOM, TOP, step)

    def __call__(self, figure: npt.ArrayLike) -> FloatArray:
        """Places of figures."""
        share = (np.asarray(figure, dtype=np.float64) - self.low) / (self.high - self.low)
        return self.start + share * (self.end - self.start)

    @property
    def ticks(self) -> list[Tick]:
        """Round places."""
        first, last = int(np.ceil(self.low / self.step - 1e-9)), int(np.floor(self.high / self.step + 1e-9))
        digits = max(0, -floor(log10(self.step)))
        figures = [number * self.step for number in range(first, last + 1)]
        return [Tick(float(self(figure)), f"{figure:,.{digits}f}") for figure in figures]


@dataclass(frozen=True)
class Line:
    """A line.

    Attributes
    ----------
    label
        What it is.
    style
        Number of its colour and dashes, from 0 on.
    d
        SVG path.
    """

    label: str
    style: int
    d: str

    @classmethod
    def through(
        cls,
        label: str,
        style: int,
        x: FloatArray,
        y: FloatArray,
        *,
        steps: bool = False,
    ) -> Line:
        """Line through places; with ``steps`` each height holds until the next place."""
        points = list(zip(np.round(x, 1).tolist(), np.round(y, 1).tolist(), strict=True))
        parts = [f"M{points[0][0]:g} {points[0][1]:g}"] if points else []
        for across, up in points[1:]:
            parts.append(f"H{across:g}V{up:g}" if steps else f"L{across:g} {up:g}")
        return cls(label, style, "".join(parts))


@dataclass(frozen=True)
class Mark:
    """A point that matters, in view box places, its label, and the style of the line that it stands on."""

    x: float
    y: float
    label: str
    style: int = 0

    @property
    def on_left(self) -> bool:
        """Whether its label stands to the left of it, where there is room."""
        return self.x > 0.62 * WIDTH


@dataclass(frozen=True)
class Chart:
    """A chart.

    Attributes
    ----------
    key
        Name within the page.
    title, description
        What it shows, in one line and in some.
    x, y, x_label, y_label
        Scales, and what they measure.
    lines, marks
        What is drawn.
    level, level_label
        Height of a rule across, None for none, and what it is.
    """

    key: str
    title: str
    description: str
    x: Scale
    y: Scale
    x_label: str
    y_label: str
    lines: tuple[Line, ...]
    marks: tuple[Mark, ...] = ()
    level: float | None = None
    level_label: str = ""

    width = WIDTH
    height = HEIGHT
    left = LEFT
    right = WIDTH - RIGHT
    top = TOP
    bottom = HEIGHT - BOTTOM
