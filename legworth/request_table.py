"""Requests as people write them: a table of their own, or one on the command line."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path

import numpy as np
import pandas as pd

from legworth.decisions import Requests
from network import Fault, InputError, Network, SettingError
from network.faults import Faults
from network.reading import read_file
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
        If the table is missing or at fault; an itinerary or class that is not sold is no fault, it is refused.
    """
    faults = Faults()
    if not path.is_file():
        raise InputError([Fault(str(path), 0, "", "there is no such file; name a table of requests")])
    table = read_file(path, table_schema("legworth", "requests"), faults)
    if table is None or faults.errors:
        raise InputError(faults.errors)
    frame = table.frame
    asked = frame[["request", "itinerary", "fare_class"]]
    moment = frame["moment"].to_numpy(dtype="datetime64[s]")
    seconds = np.where(np.isnat(moment), network.as_of.timestamp(), moment.astype(np.int64).astype(np.float64))
    seats = frame["seats"].fillna(1).to_numpy(dtype=np.int64)
    return asked, located(network, frame["itinerary"], frame["fare_class"], frame["fare"].to_numpy(), seats, seconds)


def one_request(
    network: Network, itinerary: str, fare_class: str | None, fare: float | None, seats: int, moment: str | None
) -> tuple[pd.DataFrame, Requests]:
    """Make a single request.

    Raises
    ------
    SettingError
        If the moment is not an instant with offset.
    """
    instant = network.as_of
    if moment is not None:
        try:
            instant = datetime.fromisoformat(moment)
        except ValueError as error:
            raise SettingError(f"{moment!r} is not a date and time; write 2027-03-01T06:40+01:00") from error
        if instant.tzinfo is None:
            raise SettingError(f"{moment!r} has no offset from UTC; write 2027-03-01T06:40+01:00")
    asked = pd.DataFrame({"request": ["1"], "itinerary": [itinerary], "fare_class": [fare_class]}, dtype="str")
    asked = asked.astype("category")
    money = np.array([np.nan if fare is None else fare])
    when = np.array([instant.timestamp()])
    return asked, located(network, asked["itinerary"], asked["fare_class"], money, np.array([seats]), when)


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
