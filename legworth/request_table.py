"""Requests as people write them: a table of their own, or one on the command line."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path

import numpy as np
import pandas as pd

from legworth.decisions import Requests
from network import Fault, InputError, Network, SettingError
from network.faults import Faults
from network.reading import TableData, read_file
from network.routes import positions
from network.schema import table_schema

__all__ = ["located", "one_request", "read_requests"]


def read_requests(path: Path, network: Network) -> tuple[pd.DataFrame, Requests]:
    """Read a requests table, CSV or Parquet.

    Returns
    -------
    asked, requests
        The table as read, and the requests by position.

    Raises
    ------
    InputError
        If the table is missing or at fault, or a moment lies before the snapshot, of which neither seats nor prices
        are known; an itinerary or class that is not sold is no fault, it is refused.
    """
    faults = Faults()
    if not path.is_file():
        raise InputError([Fault(str(path), 0, "", "there is no such file; name a table of requests")])
    table = read_file(path, table_schema("legworth", "requests"), faults)
    if table is None:
        raise InputError(faults.errors)
    _note_early_moments(table, network, faults)
    faults.raise_errors()
    frame = table.frame
    asked = frame[["request", "itinerary", "fare_class"]]
    moment = frame["moment"].to_numpy(dtype="datetime64[s]")
    seconds = np.where(np.isnat(moment), network.as_of.timestamp(), moment.astype(np.int64).astype(np.float64))
    seats = frame["seats"].fillna(1).to_numpy(dtype=np.int64)
    return asked, located(network, frame["itinerary"], frame["fare_class"], frame["fare"].to_numpy(), seats, seconds)


def _note_early_moments(table: TableData, network: Network, faults: Faults) -> None:
    moment = table.frame["moment"].to_numpy(dtype="datetime64[s]")
    offset = table.frame["moment_offset"].to_numpy()

    def problem(row: int) -> str:
        sign, (hours, minutes) = "-" if offset[row] < 0 else "+", divmod(abs(int(offset[row])), 60)
        local = moment[row] + np.timedelta64(int(offset[row]), "m")
        return _too_early(f"{local}{sign}{hours:02}:{minutes:02}", network)

    early = ~np.isnat(moment) & (moment.astype(np.int64) < network.as_of.timestamp())
    faults.add_rows(table.file, np.flatnonzero(early), table.line_of, "moment", problem)


def _too_early(moment: str, network: Network) -> str:
    """Say that a moment lies before the snapshot, and what would mend it."""
    return (
        f"{moment} is before the snapshot, {network.as_of.isoformat()}, and seats and prices of then are not known; "
        "give a moment from the snapshot on, or leave it out to ask at the snapshot"
    )


def one_request(
    network: Network,
    itinerary: str,
    fare_class: str | None,
    fare: float | None,
    seats: int | None,
    moment: datetime | None,
) -> tuple[pd.DataFrame, Requests]:
    """Make a single request, of one passenger and at the snapshot unless said otherwise.

    Raises
    ------
    SettingError
        If the moment lies before the snapshot.
    """
    if moment is not None and moment < network.as_of:
        raise SettingError(f"--moment {_too_early(moment.isoformat(), network)}")
    asked = pd.DataFrame({"request": ["1"], "itinerary": [itinerary], "fare_class": [fare_class]}, dtype="str")
    asked = asked.astype("category")
    money = np.array([np.nan if fare is None else fare])
    when = np.array([(moment or network.as_of).timestamp()])
    party = np.array([1 if seats is None else seats])
    return asked, located(network, asked["itinerary"], asked["fare_class"], money, party, when)


def located(
    network: Network,
    itinerary: pd.Series,
    fare_class: pd.Series,
    fare: np.ndarray,
    seats: np.ndarray,
    moment: np.ndarray,
) -> Requests:
    """Look itineraries and products up by name; an unknown one is told as `Requests` says."""
    at, _ = positions(itinerary, network.itinerary)
    classes = np.array(network.fare_classes, dtype=object)
    of_class, unknown = positions(fare_class, classes)
    key = network.product_itinerary.astype(np.int64) * max(len(classes), 1) + network.product_class
    wanted = at.astype(np.int64) * max(len(classes), 1) + of_class
    place = np.minimum(np.searchsorted(key, wanted), max(len(key) - 1, 0))
    sold = (key[place] == wanted) if len(key) else np.zeros(len(at), dtype=bool)
    asked = (of_class >= 0) | unknown
    product = np.where(~asked, -1, np.where((at >= 0) & (of_class >= 0) & sold, place, -2))
    return Requests(at.astype(np.int64), product, fare.astype(np.float64), seats.astype(np.int64), moment)
