"""The work on one part: a pure function from arrays to the bytes of its files.

It touches no disk of the store and knows no clock but a stopwatch, so it runs alike in a process of this machine and on
a worker of a cluster. Whatever runs it, the same part, the same start and the same libraries give the same bytes.
"""

from __future__ import annotations

import io
import json
import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet

from legworth.control import compare_controls
from legworth.curves import curves_table, network_curves
from legworth.refresh.fingerprints import (
    Fingerprints,
    code_fingerprint,
    part_fingerprints,
    pricing_settings,
    program_versions,
)
from legworth.refresh.leg_totals import leg_totals
from legworth.refresh.part_exchange import KEPT_TABLES, LastPart, PartInput, PartOutput
from legworth.refresh.part_folder import INPUT_TABLES, input_tables, parquet_bytes, settings_text
from legworth.refresh.proof import Proof, certify_again, proof_table
from legworth.results import result_tables
from lp import Certificate, Method, NetworkSolution, Solution, solve
from network import Component
from network.arrays import FloatArray

__all__ = ["run_part"]

PRICE_TABLES = ("bid_prices", "protection", "comparison", "connections", "proof")
"""Tables that the fingerprint ``prices`` decides."""

CARRIED = ("legs_where_controls_disagree", "products_where_controls_disagree", "at_stake", "objective_error", "solver")
"""Figures of a summary that are taken over with the tables they belong to."""


@dataclass
class _Stopwatch:
    seconds: dict[str, float] = field(default_factory=dict)
    last: float = field(default_factory=time.perf_counter)

    def lap(self, phase: str) -> None:
        now = time.perf_counter()
        self.seconds[phase] = self.seconds.get(phase, 0.0) + now - self.last
        self.last = now


@dataclass(frozen=True, eq=False)
class _Priced:
    """Prices of a part, solved or taken over: certificates, deterministic prices, new files, and summary figures."""

    certificates: dict[str, Certificate]
    mean_demand_price: FloatArray
    mean_demand_next_seat: FloatArray
    files: dict[str, bytes]
    figures: dict[str, Any]
    bid_price: FloatArray


def run_part(part: PartInput) -> PartOutput:
    """Price one part, or take its results over if nothing that decides them has changed.

    Raises
    ------
    SolveError
        If there is no certified optimum.
    """
    watch = _Stopwatch()
    found = part_fingerprints(part.network, part.options, part.demand_family)
    watch.lap("fingerprint")
    kept = _kept(part, found)
    priced = _certified_again(part) if "prices" in kept else None
    watch.lap("certify_again")
    solved = priced is None
    if priced is None:
        priced = _solved(part, watch.lap)
    files, taken = dict(priced.files), [] if solved else [f"{name}.parquet" for name in PRICE_TABLES]
    totals = leg_totals(part.network, priced.mean_demand_price, priced.mean_demand_next_seat)
    files["leg_totals.parquet"] = parquet_bytes(totals)
    if part.options.curves is not None:
        if not solved and "curves" in kept:
            taken.append("price_curves.parquet")
        else:
            files["price_curves.parquet"] = _curves(part, priced.mean_demand_price)
        watch.lap("price_curves")
    if "tables" in kept:
        taken += [f"{name}.parquet" for name in INPUT_TABLES if f"{name}.parquet" in kept["tables"].files]
    else:
        files |= {f"{name}.parquet": parquet_bytes(table) for name, table in input_tables(part.network).items()}
    summary = _summary(part, priced, found)
    files["network.toml"] = settings_text(part.network, part.demand_family).encode()
    files["summary.json"] = (json.dumps(summary, indent=1, ensure_ascii=False, allow_nan=False) + "\n").encode()
    watch.lap("input_tables")
    return PartOutput(
        part.name,
        files,
        tuple(taken),
        solved,
        summary,
        found,
        priced.certificates,
        watch.seconds,
        code_fingerprint(),
    )


def _kept(part: PartInput, found: Fingerprints) -> dict[str, LastPart]:
    """Last night's part under the name of every fingerprint that is still the same and whose files it has."""
    last = part.last
    if last is None:
        return {}
    needed = {
        "prices": {f"{name}.parquet" for name in PRICE_TABLES},
        "curves": {"price_curves.parquet"},
        "tables": {f"{name}.parquet" for name in INPUT_TABLES if name != "booking_curves"},
    }
    if part.options.lp.method is Method.RANDOMISED:
        del needed["prices"]  # an average over draws has no optimum of its own that could be certified again
    same = {name for name, value in found.as_dict().items() if last.fingerprints.get(name) == value}
    return {name: last for name, files in needed.items() if name in same and files <= last.files}


def _table(data: bytes) -> pa.Table:
    return pyarrow.parquet.read_table(io.BytesIO(data), use_threads=False)


def _figures(table: pa.Table, name: str) -> FloatArray:
    return np.asarray(table[name].to_numpy(), dtype=np.float64)


def _certified_again(part: PartInput) -> _Priced | None:
    """Certify last night's optima against tonight's data; None if they do not hold or are not there."""
    assert part.last is not None
    network, last = part.network, part.last
    if not set(KEPT_TABLES) <= set(last.tables):
        return None
    prices, totals, proof = (_table(last.tables[name]) for name in KEPT_TABLES)
    if (
        prices["leg"].to_pylist() != network.legs.name.tolist()
        or totals["leg"].to_pylist() != prices["leg"].to_pylist()
    ):
        return None
    mean_price, mean_next = (_figures(totals, f"mean_demand_{name}") for name in ("price", "next_seat"))
    bid_price = _figures(prices, "bid_price")
    optimum = Proof(_figures(proof, "allotted"), bid_price, _figures(prices, "next_seat"))
    bounding = Proof(_figures(proof, "allotted_mean_demand"), mean_price, mean_next)
    certificate = certify_again(network, optimum, part.options.lp)
    bound = certify_again(network, bounding, replace(part.options.lp, method=Method.DETERMINISTIC))
    if certificate is None or bound is None or not all(name in last.summary for name in CARRIED):
        return None
    certificates = {"bid_prices": certificate, "mean_demand": bound}
    figures = {name: last.summary[name] for name in CARRIED}
    return _Priced(certificates, mean_price, mean_next, {}, figures | {"objective": certificate.primal}, bid_price)


def _solved(part: PartInput, lap: Callable[[str], None]) -> _Priced:
    """Solve both programs, and set both controls side by side."""
    network, lp, start = part.network, part.lp, part.start
    solution = solve(network, lp, None if start is None else start.bid_price)
    lap("solve")
    bounding = _bounding(part, solution)
    lap("bound")
    controls = compare_controls(network, solution.bid_price, part.options.legs)
    lap("leg_control")
    whole = Component(network, *(np.arange(n) for n in (network.n_legs, network.n_itineraries, network.n_products)))
    tables = result_tables(network, NetworkSolution.of(network, [whole], [solution]), controls)
    files = {f"{name}.parquet": parquet_bytes(table) for name, table in tables.items()}
    files["proof.parquet"] = parquet_bytes(proof_table(network, solution.allotted, bounding.allotted))
    lap("tables")
    figures = {
        "objective": solution.objective,
        "objective_error": solution.objective_error,
        "solver": solution.solver,
        "legs_where_controls_disagree": int((~controls.agrees).sum()),
        "products_where_controls_disagree": int(controls.connections.disagrees.sum()),
        "at_stake": float(controls.connections.at_stake.sum()),
    }
    certificates = {"bid_prices": solution.certificate, "mean_demand": bounding.certificate}
    return _Priced(certificates, bounding.bid_price, bounding.next_seat, files, figures, solution.bid_price)


def _bounding(part: PartInput, solution: Solution) -> Solution:
    """Solve the deterministic program, whose optimum no control can beat on average."""
    if part.lp.method is Method.DETERMINISTIC:
        return solution
    start = solution.bid_price if part.start is None else part.start.mean_demand_price
    return solve(part.network, replace(part.lp, method=Method.DETERMINISTIC), start)


def _curves(part: PartInput, prices: FloatArray) -> bytes:
    assert part.options.curves is not None
    curves = network_curves(part.network, prices, part.options.curves, bounds=False)
    return parquet_bytes(curves_table(part.network, curves))


def _summary(part: PartInput, priced: _Priced, found: Fingerprints) -> dict[str, Any]:
    network = part.network
    certificate, bound = priced.certificates["bid_prices"], priced.certificates["mean_demand"]
    return {
        "network": network.name,
        "part": part.name,
        "currency": network.currency,
        "as_of": network.as_of.isoformat(),
        "method": str(part.options.lp.method),
        **priced.figures,
        "bounds": {"dual": certificate.dual, "revenue": bound.primal},
        "certified": certificate.holds and bound.holds,
        "certificates": {name: one.as_dict() for name, one in priced.certificates.items()},
        "sizes": {
            "components": part.components,
            "legs": network.n_legs,
            "itineraries": network.n_itineraries,
            "products": network.n_products,
            "remaining_seats": int(network.remaining.sum()),
        },
        "legs_with_price": int((priced.bid_price > 0).sum()),
        "legs_without_seats": int((network.remaining == 0).sum()),
        "fingerprints": found.as_dict(),
        "settings": {**pricing_settings(part.options), "price_curves": part.options.curves},
        "versions": program_versions(),
    }
