"""Pictures for pages: SVG as data that stands in the page itself and knows light and dark screens."""

from __future__ import annotations

import base64
import io
import warnings
from collections.abc import Mapping
from dataclasses import dataclass

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.figure import Figure

__all__ = ["INK", "LINE", "Colours", "Picture", "bare_axes", "svg_data"]

Colours = Mapping[str, tuple[str, str]]
"""Colours by name, for light and for dark screens; every light one must differ from the others."""

INK, LINE = ("#2b2f33", "#e4e7ea"), ("#8b9198", "#7d848c")
"""Of text, and of axes."""


@dataclass(frozen=True)
class Picture:
    """A picture for wide and for narrow screens, each as a data URI, and what it shows in words."""

    wide: str
    narrow: str
    about: str


def bare_axes(axes: Axes) -> None:
    """Leave two sides of the frame, in quiet colours."""
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_color(LINE[0])
    axes.tick_params(colors=INK[0])
    for text in (axes.xaxis.label, axes.yaxis.label, axes.xaxis.get_offset_text()):
        text.set_color(INK[0])


def svg_data(figure: Figure, colours: Colours) -> str:
    """Return a figure as a data URI of SVG without date or random names, whose colours a style sheet in it turns."""
    named = {"ink": INK, "line": LINE, **colours}
    text = io.StringIO()
    # A context would have to be given literal keys to please type checkers that know all of them.
    with mpl.rc_context(), warnings.catch_warnings():
        mpl.rcParams["svg.hashsalt"] = "legworth"
        mpl.rcParams["svg.fonttype"] = "none"
        mpl.rcParams["text.parse_math"] = False
        warnings.filterwarnings("ignore", message="Glyph .* missing from font")
        figure.savefig(text, format="svg", transparent=True, metadata={"Date": None, "Creator": None})
    found = text.getvalue()
    found = found[found.index("<svg") :]
    for name, (light, _) in named.items():
        found = found.replace(light, f"var(--{name})")
    light, dark = ("".join(f"--{name}:{pair[k]};" for name, pair in named.items()) for k in range(2))
    style = (
        f"<style>:root{{{light}}}@media(prefers-color-scheme:dark){{:root{{{dark}}}}}text{{fill:var(--ink)}}</style>"
    )
    end = found.index(">") + 1
    data = base64.b64encode(f"{found[:end]}{style}{found[end:]}".encode()).decode("ascii")
    return f"data:image/svg+xml;base64,{data}"
