"""The table of adjustments, read and held against the network."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd

from legworth.estimation.adjustments import Adjustment
from legworth.estimation.departures import Departures
from network import Fault, Faults, InputError, Network
from network.arrays import BoolArray, FloatArray, NameArray
from network.reading import TableData, read_file
from network.routes import positions
from network.schema import table_schema

__all__ = ["read_adjustments"]

CONDITIONS = ("leg", "itinerary", "origin", "destination", "fare_class", "first_departure", "last_departure")
DATE = "[0-9]{4}-[0-9]{2}-[0-9]{2}"


def read_adjustments(
    path: Path, network: Network, departures: Departures
) -> tuple[list[Adjustment], list[BoolArray], tuple[Fault, ...]]:
    """Read a table of adjustments.

    Parameters
    ----------
    path
        The table, CSV or Parquet.
    network, departures
        What it is held against; ``as_of`` of the network decides what has expired.

    Returns
    -------
    rows, scopes, warnings
        The rows in their order, the products, (J,), that each holds for, and those that hold for none.

    Raises
    ------
    InputError
        With every fault: unknown names, dates that are none or run backwards, a row with neither factor nor value or
        with both.
    """
    faults = Faults()
    if not path.is_file():
        raise InputError([Fault(str(path), 0, "", "there is no such file; name a table of adjustments")])
    table = read_file(path, table_schema("legworth", "adjustments"), faults)
    if table is None:
        raise InputError(faults.errors)
    conditions = _conditions(table, network, departures, faults)
    _check_changes(table, faults)
    faults.raise_errors()
    rows = [_row(table, at, network.as_of) for at in range(len(table))]
    scopes = [_scope(conditions, at, network, departures) for at in range(len(table))]
    nobody = [at for at, scope in enumerate(scopes) if not scope.any()]
    faults.add_rows(
        table.file,
        nobody,
        table.line_of,
        "adjustment",
        lambda row: f"{rows[row].adjustment!r} holds for no product of the network; nothing is changed by it",
        warning=True,
    )
    return rows, scopes, tuple(faults.warnings)


def _row(table: TableData, at: int, as_of: datetime) -> Adjustment:
    frame = table.frame
    until = _instant(frame, "until", at)

    def number(name: str) -> float | None:
        value = float(frame[name].iloc[at])
        return None if np.isnan(value) else value

    return Adjustment(
        adjustment=str(frame["adjustment"].iloc[at]),
        scope={name: str(frame[name].iloc[at]) for name in CONDITIONS if not pd.isna(frame[name].iloc[at])},
        factor=number("factor"),
        value=number("value"),
        who=str(frame["who"].iloc[at]),
        when=(_instant(frame, "when", at) or as_of).isoformat(),
        why=str(frame["why"].iloc[at]),
        until=None if until is None else until.isoformat(),
        expired=until is not None and until <= as_of,
    )


def _instant(frame: pd.DataFrame, name: str, at: int) -> datetime | None:
    value = frame[name].iloc[at]
    return None if pd.isna(value) else value.to_pydatetime().replace(tzinfo=UTC)


def _conditions(table: TableData, network: Network, departures: Departures, faults: Faults) -> dict[str, np.ndarray]:
    """Conditions by column: positions, -1 for none; names of itineraries as codes of their own; dates."""
    known: dict[str, tuple[NameArray, str]] = {
        "leg": (network.legs.name, "a leg; correct the name as in legs.csv"),
        "origin": (network.stations.name, "a station; correct the name as in stations.csv"),
        "destination": (network.stations.name, "a station; correct the name as in stations.csv"),
        "fare_class": (np.array(network.fare_classes, dtype=object), "a fare class of the network; correct it"),
        "itinerary": (
            np.concatenate([network.itinerary, departures.history_name]),
            "an itinerary or a history_name; correct the name as in itineraries.csv",
        ),
    }
    found: dict[str, np.ndarray] = {}
    for name, (names, what) in known.items():
        values = table.frame[name]
        found[name], unknown = positions(values, names)
        faults.add_rows(
            table.file,
            np.flatnonzero(unknown),
            table.line_of,
            name,
            _none_known(values, what),
        )
    for name in ("first_departure", "last_departure"):
        found[name] = _dates(table, name, faults)
    backwards = found["first_departure"] > found["last_departure"]
    faults.add_rows(
        table.file,
        np.flatnonzero(backwards),
        table.line_of,
        "last_departure",
        lambda row: (
            f"{found['last_departure'][row]} lies before first_departure {found['first_departure'][row]}; "
            "correct one of them"
        ),
    )
    return found


def _none_known(values: pd.Series, what: str) -> Callable[[int], str]:
    return lambda row: f"{values.iloc[row]!r} is not {what}"


def _dates(table: TableData, name: str, faults: Faults) -> np.ndarray:
    values = table.frame[name]
    text = values.astype("str").str.strip()
    shaped = text.where(text.str.fullmatch(DATE).fillna(False).astype(bool))
    dates = pd.to_datetime(shaped, format="%Y-%m-%d", errors="coerce")
    bad = values.notna().to_numpy() & dates.isna().to_numpy()
    faults.add_rows(
        table.file,
        np.flatnonzero(bad),
        table.line_of,
        name,
        lambda row: f"{values.iloc[row]!r} is not a date; write it as 2027-03-01",
    )
    return np.asarray(dates.to_numpy().astype("datetime64[D]"))


def _check_changes(table: TableData, faults: Faults) -> None:
    """Note rows that do not say by what, or say it twice."""
    factor, value = (table.frame[name].notna().to_numpy() for name in ("factor", "value"))
    noted = {fault.line for fault in faults.errors if fault.column in ("factor", "value")}
    for rows, problem in (
        (~factor & ~value, "the row has neither a factor nor a value; give one of them"),
        (factor & value, "the row has both a factor and a value; give one of them"),
    ):
        at = [int(row) for row in np.flatnonzero(rows) if table.line_of(int(row)) not in noted]
        faults.add_rows(table.file, at, table.line_of, "factor", lambda _, problem=problem: problem)  # type: ignore[misc]


def _scope(conditions: dict[str, np.ndarray], at: int, network: Network, departures: Departures) -> BoolArray:
    """(J,) products that meet all conditions of a row; those that have departed meet none."""
    holds = departures.days_left > 0
    leg, itinerary = int(conditions["leg"][at]), int(conditions["itinerary"][at])
    if leg >= 0:
        uses: FloatArray = np.asarray(network.incidence[[leg], :].todense()).ravel()
        holds = holds & (uses > 0)
    if itinerary >= 0:
        names = np.concatenate([network.itinerary, departures.history_name])
        holds = holds & ((network.itinerary == names[itinerary]) | (departures.history_name == names[itinerary]))
    for name in ("origin", "destination"):
        station = int(conditions[name][at])
        if station >= 0:
            holds = holds & (getattr(departures, name) == station)
    first, last = conditions["first_departure"][at], conditions["last_departure"][at]
    if not np.isnat(first):
        holds = holds & (departures.date >= first)
    if not np.isnat(last):
        holds = holds & (departures.date <= last)
    chosen = holds[network.product_itinerary]
    fare_class = int(conditions["fare_class"][at])
    return chosen & (network.product_class == fare_class) if fare_class >= 0 else chosen
