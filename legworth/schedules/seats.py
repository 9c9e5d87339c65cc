"""Seats: from an aircraft configuration, or from a table of seats by equipment."""

from __future__ import annotations

import re
from collections.abc import Mapping
from pathlib import Path

import numpy as np

from network import Fault, InputError, table_schema
from network.faults import Faults
from network.reading import read_file

__all__ = ["ANY_EQUIPMENT", "UNKNOWN", "configured_seats", "read_seats"]

UNKNOWN = -1
"""Seats where nothing gives them."""

ANY_EQUIPMENT = "*"

CABIN = re.compile(r"(?:(BB|LL|PP)(\d{0,3})|([A-Z])(\d{1,3})) *")


def configured_seats(text: str, cabins: str = "") -> int:
    """Seats of an aircraft configuration.

    Parameters
    ----------
    text
        The configuration as schedules write it: the letter of each cabin and its seats, such as ``C12Y138``; bulk,
        containers and pallets (``BB``, ``LL``, ``PP``) and a version (``VV`` and what follows) hold no seats
        (SSIM, from memory).
    cabins
        Letters of the cabins to count; all if empty.

    Returns
    -------
    int
        The seats, `UNKNOWN` if the text is not a configuration.

    Examples
    --------
    >>> configured_seats("C12Y138"), configured_seats("Y180VVA320"), configured_seats("F008C024Y244", "CY")
    (150, 180, 268)
    >>> configured_seats("NEW CABIN")
    -1
    """
    plain = text.strip().partition("VV")[0].strip()
    seats, at, found = 0, 0, False
    while at < len(plain):
        cabin = CABIN.match(plain, at)
        if cabin is None:
            return UNKNOWN
        at = cabin.end()
        if cabin[3]:
            found = True
            seats += int(cabin[4]) if not cabins or cabin[3] in cabins else 0
    return seats if found else UNKNOWN


def read_seats(path: Path | None) -> Mapping[str, int]:
    """Read a table of seats by equipment; empty if ``path`` is None.

    Raises
    ------
    InputError
        If the table is missing or at fault.
    """
    if path is None:
        return {}
    if not path.is_file():
        raise InputError([Fault(str(path), 0, "", "there is no such file; name a table of seats")])
    faults = Faults()
    table = read_file(path, table_schema("legworth", "seats"), faults)
    faults.raise_errors()
    if table is None:
        raise AssertionError("a table is absent although no fault was noted")
    equipment = table.frame["equipment"].to_numpy(dtype=object)
    return dict(zip(equipment.tolist(), table.frame["seats"].to_numpy(dtype=np.int64).tolist(), strict=True))
