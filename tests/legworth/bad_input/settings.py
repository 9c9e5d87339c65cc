"""Settings in ``network.toml`` that are missing, unknown or out of their limits."""

from __future__ import annotations

from tests.legworth.bad_input.kinds import Case, Cases

__all__ = ["SETTINGS"]


def line(number: int, text: str | None, *, setting: str = "", at: int | None = None) -> Case:
    """Case of one other line; the fault is at that line, or at ``at``."""
    place = ("network.toml", number if at is None else at, setting)
    return lambda folder: folder.line("network.toml", number, text), [place]


CONNECTION = "defaults.minimum_connection"

SETTINGS: Cases = {
    "no network.toml": (lambda f: f.drop("network.toml"), [("network.toml", 0, "")]),
    "network.toml is a folder": (lambda f: f.put("network.toml", None), [("network.toml", 0, "")]),
    "bad TOML": line(2, 'currency = "EUR'),
    "TOML without quotes": line(1, "name = Tern Sound"),
    "TOML that ends too early": (lambda f: f.put("network.toml", 'name = "x"\nclasses = ['), [("network.toml", 2, "")]),
    "a setting twice": line(2, 'name = "again"'),
    "TOML in Latin-1": (
        lambda f: f.put("network.toml", f.text("network.toml").replace("Tern", "Mære").encode("latin-1")),
        [("network.toml", 1, "")],
    ),
    "TOML with brackets without end": (
        lambda f: f.put("network.toml", "name = " + "[" * 5000),
        [("network.toml", 0, "")],
    ),
    "TOML with a number without end": line(2, "currency = " + "9" * 5000, at=0),
    "empty network.toml": (
        lambda f: f.put("network.toml", ""),
        [("network.toml", 0, name) for name in ("name", "currency", "as_of")],
    ),
    "unknown setting": line(2, 'currency = "EUR"\nfamily = "auto"', setting="family", at=3),
    "unknown default": line(8, 'family = "auto"', setting="defaults.family"),
    "name among the defaults": line(8, 'name = "x"', setting="defaults.name"),
    "missing currency": line(2, None, setting="currency", at=0),
    "blank currency": line(2, 'currency = ""', setting="currency"),
    "currency as a number": line(2, "currency = 978", setting="currency"),
    "as_of without offset": line(3, 'as_of = "2030-02-25T02:30"', setting="as_of"),
    "as_of a local TOML time": line(3, "as_of = 2030-02-25T02:30:00", setting="as_of"),
    "as_of a date": line(3, "as_of = 2030-02-25", setting="as_of"),
    "as_of a number in words": line(3, 'as_of = "1898220600"', setting="as_of"),
    "as_of impossible": line(3, 'as_of = "2030-02-30T02:30+01:00"', setting="as_of"),
    "classes as one text": line(4, 'fare_classes = "ABC"', setting="fare_classes"),
    "a class twice": line(4, 'fare_classes = ["A", "B", "C", "A"]', setting="fare_classes"),
    "a class without name": line(4, 'fare_classes = ["A", "B", "C", ""]', setting="fare_classes.3"),
    "negative connection": line(7, "minimum_connection = -1", setting=CONNECTION),
    "connection NaN": line(7, "minimum_connection = nan", setting=CONNECTION),
    "connection without end": line(7, "minimum_connection = inf", setting=CONNECTION),
    "connection in words": line(7, 'minimum_connection = "40"', setting=CONNECTION),
    "connection true": line(7, "minimum_connection = true", setting=CONNECTION),
    "unknown family": line(8, 'demand_family = "weibull"', setting="defaults.demand_family"),
    "unknown family by a dotted key": (
        lambda f: f.mutate("network.toml", lambda t: t.split("[")[0] + '["A"]\n\ndefaults.demand_family = "x"\n'),
        [("network.toml", 6, "defaults.demand_family")],
    ),
    "defaults in line": (
        lambda f: f.put("network.toml", f.text("network.toml").split("\n\n")[0] + '\ndefaults = {family = "x"}\n'),
        [("network.toml", 5, "defaults.family")],
    ),
}
