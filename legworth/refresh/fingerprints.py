"""Fingerprints: what decides the results of a part, and nothing else, as SHA-256.

Three, each of which covers one kind of file:

prices
    Legs and the seats they have left, itineraries, fares, demand to come, fare classes, settings, and the code and
    libraries that compute. Decides the program, protection, comparison and connections. The instant of the snapshot
    enters only through legs that have departed, which have no seats left.
curves
    That, and the booking curves and days before departure: decides the price curves.
tables
    Everything that the input tables say: decides whether they are written again.
"""

from __future__ import annotations

import hashlib
import json
import platform
from collections.abc import Iterator
from dataclasses import asdict, dataclass
from functools import cache
from importlib.metadata import version
from importlib.resources import files
from importlib.resources.abc import Traversable
from typing import Any

import numpy as np

from heuristics.arrivals import days_before_departure
from legworth import __version__
from legworth.pricing import PricingOptions
from legworth.refresh.part_folder import used_curves
from lp import Method
from network import Network

__all__ = ["Fingerprints", "code_fingerprint", "part_fingerprints", "pricing_settings", "program_versions"]

LIBRARIES = ("numpy", "scipy", "pandas", "pulp", "highspy", "clarabel", "pyarrow")
ROOMS = ("network", "lp", "heuristics")
MODULES = (
    "control.py",
    "curves.py",
    "pricing.py",
    "results.py",
    "refresh/fingerprints.py",
    "refresh/leg_totals.py",
    "refresh/part_exchange.py",
    "refresh/part_folder.py",
    "refresh/proof.py",
    "refresh/tasks.py",
)
"""Modules of ``legworth`` that compute or write what a part publishes; of the other rooms all do."""


@dataclass(frozen=True)
class Fingerprints:
    """The fingerprints of a part, in hexadecimal."""

    prices: str
    curves: str
    tables: str

    def as_dict(self) -> dict[str, str]:
        """By name."""
        return asdict(self)


def part_fingerprints(network: Network, options: PricingOptions, demand_family: str) -> Fingerprints:
    """Fingerprints of a part.

    Parameters
    ----------
    network
        The part.
    options
        How it is priced; how long a solver may take and how many work side by side decide nothing.
    demand_family
        Family of demands asked for, which its ``network.toml`` repeats.
    """
    settings = {**pricing_settings(options), **program_versions(), "code": code_fingerprint()}
    prices = _digest("prices", json.dumps(settings, sort_keys=True), *_priced(network))
    curves = _digest("curves", prices, str(options.curves), *_arrivals(network))
    tables = _digest("tables", json.dumps(program_versions(), sort_keys=True), code_fingerprint(), *_tables(network))
    return Fingerprints(prices, curves, _digest(tables, demand_family))


def pricing_settings(options: PricingOptions) -> dict[str, Any]:
    """The settings that decide prices, as plain values."""
    lp = options.lp
    drawn = lp.method is Method.RANDOMISED
    return {
        "method": str(lp.method),
        "solver": lp.solver.name,
        "tail": lp.tail,
        "samples": lp.samples if drawn else None,
        "seed": lp.seed if drawn else None,
        "leg_control": asdict(options.legs),
    }


@cache
def program_versions() -> dict[str, str]:
    """Versions of this program, of Python and of the libraries that compute or write."""
    return {"legworth": __version__, "python": platform.python_version()} | {name: version(name) for name in LIBRARIES}


@cache
def code_fingerprint() -> str:
    """SHA-256 of the sources of this program that prices depend on; a changed line makes every part be solved anew."""
    digest = hashlib.sha256()
    sources = [(f"legworth/{name}", files("legworth").joinpath(name)) for name in MODULES]
    for room in ROOMS:
        sources += _sources(files(room), room)
    for name, file in sorted(sources):
        digest.update(f"{name}\0".encode() + hashlib.sha256(file.read_bytes()).digest())
    return digest.hexdigest()


def _sources(folder: Traversable, place: str) -> Iterator[tuple[str, Traversable]]:
    for entry in folder.iterdir():
        if entry.is_dir() and not entry.name.startswith(("_", ".")):
            yield from _sources(entry, f"{place}/{entry.name}")
        elif entry.name.endswith((".py", ".json")):
            yield f"{place}/{entry.name}", entry


Piece = str | np.ndarray


def _digest(*pieces: Piece) -> str:
    """Hash texts and arrays, each with its kind and size, so that nothing runs into its neighbour."""
    digest = hashlib.sha256()
    for piece in pieces:
        if isinstance(piece, np.ndarray) and piece.dtype.kind != "O":
            digest.update(f"{piece.dtype.str}{piece.shape}\0".encode())
            digest.update(piece.tobytes())
            continue
        texts = [str(text).encode() for text in ([piece] if isinstance(piece, str) else piece)]
        digest.update(np.array([len(texts), *map(len, texts)], dtype=np.int64).tobytes())
        digest.update(b"".join(texts))
    return digest.hexdigest()


def _wide(figures: np.ndarray) -> np.ndarray:
    """Whole numbers as int64, whatever width the reader chose."""
    return figures.astype(np.int64)


def _priced(network: Network) -> Iterator[Piece]:
    yield _wide(network.remaining)
    yield from _products(network)


def _products(network: Network) -> Iterator[Piece]:
    yield np.array(network.fare_classes, dtype=object)
    yield network.legs.name
    yield network.itinerary
    yield _wide(network.path_start)
    yield _wide(network.path_leg)
    yield _wide(network.product_itinerary)
    yield _wide(network.product_class)
    yield network.fare
    yield network.demand.mean
    yield network.demand.deviation
    yield _wide(network.demand.family)


def _arrivals(network: Network) -> Iterator[Piece]:
    yield days_before_departure(network)
    yield from _curves(network)


def _curves(network: Network) -> Iterator[Piece]:
    used = used_curves(network)
    curves = network.curves
    yield np.searchsorted(used, network.curve) * (network.curve >= 0) - (network.curve < 0)
    for curve in used.tolist():
        rows = slice(curves.start[curve], curves.start[curve + 1])
        yield str(curves.name[curve])
        yield curves.days_before[rows]
        yield curves.share[rows]


def _tables(network: Network) -> Iterator[Piece]:
    stations, legs = network.stations, network.legs
    used = np.unique(np.concatenate([legs.origin, legs.destination]))
    for figures in (stations.name, stations.label, stations.latitude, stations.longitude, stations.minimum_connection):
        yield figures[used]
    for places in (legs.origin, legs.destination):
        yield np.searchsorted(used, places)
    for instant in (legs.departs, legs.arrives):
        yield instant.astype("datetime64[s]").astype(np.int64)
    for numbers in (legs.departs_offset, legs.arrives_offset, legs.capacity, legs.sold):
        yield _wide(numbers)
    yield from _products(network)
    yield from _curves(network)
