"""What travels between a night and whoever works on its parts."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

from legworth.pricing import PricingOptions
from legworth.refresh.fingerprints import Fingerprints
from lp import Certificate, LpOptions
from lp.solvers import SolverName
from network import Network
from network.arrays import FloatArray

__all__ = ["KEPT_TABLES", "LastPart", "PartInput", "PartOutput", "Start"]

KEPT_TABLES = ("bid_prices", "leg_totals", "proof")
"""Tables of last night that a part needs to be certified again."""


@dataclass(frozen=True, eq=False)
class Start:
    """(L,) prices to start from, currency: of the program priced, and of the deterministic one."""

    bid_price: FloatArray
    mean_demand_price: FloatArray


@dataclass(frozen=True, eq=False)
class LastPart:
    """What an earlier night holds of the part of the same name.

    Attributes
    ----------
    fingerprints, summary
        Its fingerprints by name, and its ``summary.json``.
    tables
        Parquet of `KEPT_TABLES`.
    files
        Names of all its files.
    """

    fingerprints: dict[str, str]
    summary: dict[str, Any]
    tables: dict[str, bytes]
    files: frozenset[str]


@dataclass(frozen=True, eq=False)
class PartInput:
    """One part, and how it is to be priced.

    Attributes
    ----------
    name, network, components
        The part, and how many components it bundles.
    options
        How it is priced.
    demand_family
        Family of demands asked for, as in ``network.toml``.
    start, last
        Prices to start from, and the same part of last night; None where there is none.
    solver
        Solver in place of the one asked for, where that one has failed.
    """

    name: str
    network: Network
    components: int
    options: PricingOptions
    demand_family: str = "auto"
    start: Start | None = None
    last: LastPart | None = None
    solver: SolverName | None = None

    @property
    def lp(self) -> LpOptions:
        """Options of the program, with the solver that is to be used."""
        lp = self.options.lp
        return lp if self.solver is None else replace(lp, solver=replace(lp.solver, name=self.solver))


@dataclass(frozen=True, eq=False)
class PartOutput:
    """What is to be stored of a part.

    Attributes
    ----------
    name
        The part.
    written
        Content of new files by name.
    taken
        Names of files that are those of last night.
    solved
        Whether its program was solved, not taken over.
    summary, fingerprints, certificates
        Its ``summary.json``, its fingerprints, and what was proved by name of the program.
    seconds
        By phase.
    code
        Fingerprint of the code that worked.
    """

    name: str
    written: dict[str, bytes]
    taken: tuple[str, ...]
    solved: bool
    summary: dict[str, Any]
    fingerprints: Fingerprints
    certificates: dict[str, Certificate]
    seconds: dict[str, float]
    code: str
