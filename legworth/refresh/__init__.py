"""The nightly refresh: every departure still on sale priced, proved, checked against last night, and put in force.

`refresh` is the recipe (`night`). Inputs are read from one moment (`inputs`), cut into parts (`parts`), and each part
is priced by a pure function (`tasks`) that recognises what has not changed (`fingerprints`, `proof`), by processes of
this machine or workers of a cluster (`running`). `checks` may stop a night; `changes` says what moved and why.

The names below are loaded when they are first asked for: a process that works on parts needs no pictures, pages or
queries.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from legworth.refresh.night import Refreshed, RefreshOptions, refresh
    from legworth.refresh.part_exchange import PartInput, PartOutput
    from legworth.refresh.parts import Part, cut_parts
    from legworth.refresh.tasks import run_part

__all__ = ["Part", "PartInput", "PartOutput", "RefreshOptions", "Refreshed", "cut_parts", "refresh", "run_part"]

_HOME = {
    **dict.fromkeys(("RefreshOptions", "Refreshed", "refresh"), "night"),
    **dict.fromkeys(("Part", "cut_parts"), "parts"),
    **dict.fromkeys(("PartInput", "PartOutput"), "part_exchange"),
    "run_part": "tasks",
}


def __getattr__(name: str) -> Any:
    """Load a name of the front door."""
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOME[name]}"), name)
