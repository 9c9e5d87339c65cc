"""The whole estimate as a recipe: read the folder and its history, estimate, adjust, test on the past."""

from __future__ import annotations

import hashlib
import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TypeVar

import numpy as np
import pandas as pd

from legworth.estimation.adjustments import Adjusted, apply_adjustments
from legworth.estimation.adjustments_table import read_adjustments
from legworth.estimation.backtest import Backtest, BacktestOptions, run_backtest
from legworth.estimation.departures import Departures, network_departures
from legworth.estimation.estimate import DemandEstimate, DemandOptions, Pools, estimate_demand
from legworth.estimation.history import BookingHistory
from legworth.estimation.history_table import Unknown, read_history
from legworth.estimation.method_comparison import MethodComparison, compare_methods
from legworth.estimation.scores import Scores, score_backtest
from network import Demand, Fault, InputError, Network, read_folder
from network.faults import Faults

__all__ = ["EstimateOptions", "Estimated", "estimate_folder"]

ADJUSTMENTS = ("adjustments.csv", "adjustments.parquet")
Progress = Callable[[int, int], None]
Result = TypeVar("Result")


@dataclass(frozen=True)
class EstimateOptions:
    """How a folder is estimated.

    Attributes
    ----------
    demand
        How demand is.
    backtest
        How it is tested.
    adjustments
        Table of adjustments; None takes ``adjustments`` of the folder, where there is one.
    adjust
        Whether adjustments are applied at all.
    unknown
        What becomes of itineraries of the history that the network does not know.
    may_reopen
        Whether classes may have been open between two readings at which they were closed.
    """

    demand: DemandOptions = field(default_factory=DemandOptions)
    backtest: BacktestOptions = field(default_factory=BacktestOptions)
    adjustments: Path | None = None
    adjust: bool = True
    unknown: Unknown = "fault"
    may_reopen: bool = False


@dataclass(frozen=True, eq=False)
class Estimated:
    """Demand to come of a folder, and what it rests on.

    Attributes
    ----------
    network
        The network with the demand and the curves estimated, adjustments included.
    departures
        Its departures.
    options
        How it was estimated.
    history, rows
        Readings, and the rows of their table.
    estimate
        The estimate before adjustments.
    methods
        What other methods of unconstraining make of the same history, None where no departure has left.
    adjusted
        Demand after them, and their log.
    backtest, scores
        The test on the past, None where there was none or history is too short for it.
    inputs
        SHA-256 of the files of history and adjustments, by name.
    warnings
        What was odd about the tables.
    seconds
        By step.
    """

    network: Network
    departures: Departures
    options: EstimateOptions
    history: BookingHistory
    rows: int
    estimate: DemandEstimate
    methods: MethodComparison | None
    adjusted: Adjusted
    backtest: Backtest | None
    scores: Scores | None
    inputs: dict[str, str]
    warnings: tuple[Fault, ...]
    seconds: dict[str, float]


def estimate_folder(
    history: Path, folder: Path, options: EstimateOptions | None = None, progress: Progress | None = None
) -> Estimated:
    """Estimate the demand to come of a network folder from booking history.

    Parameters
    ----------
    history
        Table of booking history.
    folder
        Network folder; its demand and booking curves are not looked at.
    options
        How.
    progress
        Called with the steps done and all steps.

    Raises
    ------
    InputError
        With every fault of the folder, or else of history and adjustments together.
    SettingError
        If an option is out of its limits, or history holds no reading by the snapshot.
    """
    options = options or EstimateOptions()
    clock, tell = _Clock(), progress or (lambda done, total: None)
    steps = 3 + options.backtest.snapshots
    tell(0, steps)
    read = read_folder(folder, with_demand=False)
    network = read.network
    departures = network_departures(network, read.history_name)
    faults = Faults()
    _check_names(network, departures, faults)
    table = _adjustments(folder, options)
    readings = _kept(
        faults,
        lambda: read_history(
            history,
            departures.history_name,
            network.fare_classes,
            network.as_of,
            options.unknown,
            may_reopen=options.may_reopen,
        ),
    )
    rows = _kept(faults, lambda: read_adjustments(table, network, departures)) if table is not None else ([], [], ())
    faults.raise_errors()
    if readings is None or rows is None:
        raise AssertionError("a table is absent although no fault was noted")
    clock.lap("read")
    tell(1, steps)
    estimate = estimate_demand(readings.history, network, network.as_of, options.demand, departures.history_name)
    clock.lap("estimate")
    methods = compare_methods(readings.history, estimate.fit)
    clock.lap("methods")
    tell(2, steps)
    at = network.product_itinerary
    demand = Demand.of(estimate.mean, estimate.deviation)
    adjusted = apply_adjustments(demand, rows[0], rows[1], departures.date[at])
    clock.lap("adjust")
    backtest = _tested(readings.history, network, departures, options, lambda done, _: tell(2 + done, steps))
    scores = None if backtest is None else score_backtest(backtest)
    clock.lap("test")
    tell(steps, steps)
    files = [history, *([] if table is None else [table])]
    return Estimated(
        network=replace(
            network,
            demand=adjusted.demand,
            curve=estimate.forecast.curve.astype(np.int32),
            curves=estimate.curves,
        ),
        departures=departures,
        options=options,
        history=readings.history,
        rows=readings.rows,
        estimate=estimate,
        methods=methods,
        adjusted=adjusted,
        backtest=backtest,
        scores=scores,
        inputs={path.name: _digest(path) for path in files},
        warnings=(*read.warnings, *readings.warnings, *rows[2]),
        seconds=clock.seconds,
    )


def _tested(
    history: BookingHistory, network: Network, departures: Departures, options: EstimateOptions, progress: Progress
) -> Backtest | None:
    """Test on the past; None where that is not wanted or history is too short."""
    if not options.backtest.snapshots:
        return None
    pools = Pools.of(history, network, departures.history_name)
    day = np.datetime64(network.as_of.date(), "D")
    return run_backtest(history, pools, day, options.demand, options.backtest, progress)


class _Clock:
    """Seconds by step."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._last = time.perf_counter()

    def lap(self, step: str) -> None:
        now = time.perf_counter()
        self.seconds[step] = now - self._last
        self._last = now


def _kept(faults: Faults, read: Callable[[], Result]) -> Result | None:
    """Read a table; its faults are kept for later, so that those of all tables are told together."""
    try:
        return read()
    except InputError as error:
        faults.found.extend(error.faults)
        return None


def _adjustments(folder: Path, options: EstimateOptions) -> Path | None:
    if not options.adjust:
        return None
    if options.adjustments is not None:
        return options.adjustments
    found = [path for name in ADJUSTMENTS if (path := folder / name).exists()]
    if len(found) > 1:
        raise InputError([Fault(found[0].name, 0, "", f"stands beside {found[1].name}; keep one of the two")])
    return found[0] if found else None


def _check_names(network: Network, departures: Departures, faults: Faults) -> None:
    """Note itineraries that history could not tell apart: of one name on one date."""
    keys = pd.DataFrame({"name": departures.history_name, "date": departures.date})
    again = np.flatnonzero(keys.duplicated().to_numpy())
    faults.add_rows(
        "itineraries",
        again.tolist(),
        lambda _: 0,
        "history_name",
        lambda at: (
            f"{network.itinerary[at]} departs on {departures.date[at]} under the name {departures.history_name[at]!r}, "
            "as another itinerary does; history cannot tell them apart, so give each a name of its own"
        ),
    )


def _digest(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
