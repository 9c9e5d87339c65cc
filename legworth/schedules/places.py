"""Stations as schedules need them: names, coordinates, connection times, and the time zone of each."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pandas as pd

from network import Fault, InputError, table_schema
from network.arrays import BoolArray, FloatArray, IntArray, NameArray
from network.faults import Faults
from network.reading import read_file
from network.time_zones import zone_named

__all__ = ["Places", "read_places"]


@dataclass(frozen=True, eq=False)
class Places:
    """Stations by position.

    ``label``, ``latitude`` and ``longitude`` (degrees), ``minimum_connection`` (minutes) and ``timezone`` (IANA name)
    are blank, NaN or "" where they are not known. With ``complete`` a station that is not among them is a fault.
    """

    name: NameArray
    label: NameArray
    latitude: FloatArray
    longitude: FloatArray
    minimum_connection: FloatArray
    timezone: NameArray
    complete: bool = False

    @classmethod
    def none(cls) -> Places:
        """No stations."""
        names, figures = np.zeros(0, dtype=object), np.zeros(0)
        return cls(names, names, figures, figures, figures, names)

    def __len__(self) -> int:
        return len(self.name)

    def with_names(self, names: NameArray) -> Places:
        """Add stations of which no more than the name is known."""
        new, blank, unknown = pd.unique(names), "", np.nan
        new = new[~np.isin(new.astype(str), self.name.astype(str))] if len(self) else new
        texts, figures = np.full(len(new), blank, dtype=object), np.full(len(new), unknown)
        return replace(
            self,
            name=np.append(self.name, new),
            label=np.append(self.label, texts),
            latitude=np.append(self.latitude, figures),
            longitude=np.append(self.longitude, figures),
            minimum_connection=np.append(self.minimum_connection, figures),
            timezone=np.append(self.timezone, texts),
        )

    def locate(self, names: NameArray) -> IntArray:
        """Position of each name, -1 where it is not among them."""
        found: IntArray = pd.Index(self.name, dtype=object).get_indexer(pd.Index(names, dtype=object))
        return found.astype(np.int64)

    @property
    def zones(self) -> tuple[IntArray, NameArray]:
        """For every station the position of its zone, -1 if unknown, and the names of the zones."""
        zone, names = pd.factorize(pd.Series(self.timezone, dtype=object).replace("", None))
        return np.asarray(zone, dtype=np.int64), np.asarray(names, dtype=object)

    def take(self, rows: IntArray | BoolArray) -> Places:
        """Return some of the stations."""
        return replace(
            self,
            **{
                field: getattr(self, field)[rows]
                for field in ("name", "label", "latitude", "longitude", "minimum_connection", "timezone")
            },
        )

    def overlaid(self, other: Places) -> Places:
        """Give what ``other`` knows of the same stations precedence, leaving out those that are not here."""
        at = other.locate(self.name)
        there = np.flatnonzero(at >= 0)
        changed = {}
        for field in ("label", "latitude", "longitude", "minimum_connection", "timezone"):
            values, theirs = getattr(self, field).copy(), getattr(other, field)[at[there]]
            known = theirs != "" if values.dtype == object else ~np.isnan(theirs)
            values[there[known]] = theirs[known]
            changed[field] = values
        return replace(self, **changed)


def read_places(path: Path | None, *, complete: bool) -> Places:
    """Read a table of stations, with the columns of ``stations.csv``; none if ``path`` is None.

    Raises
    ------
    InputError
        If the table is missing or at fault, or names a zone that the IANA database does not know.
    """
    if path is None:
        return Places.none()
    if not path.is_file():
        raise InputError([Fault(str(path), 0, "", "there is no such file; name a table of stations")])
    faults = Faults()
    table = read_file(path, table_schema("network", "stations"), faults)
    if table is not None:
        zone = table.frame["timezone"]
        unknown = {str(name) for name in zone.cat.categories if zone_named(str(name)) is None}
        rows = np.flatnonzero(zone.isin(unknown).to_numpy())
        faults.add_rows(
            table.file,
            rows,
            table.line_of,
            "timezone",
            lambda row: f"{zone.iloc[row]!r} is no time zone of the IANA database; write one like Europe/Berlin",
        )
    faults.raise_errors()
    if table is None:
        raise AssertionError("a table is absent although no fault was noted")
    frame = table.frame
    label, timezone = (frame[column].astype(object) for column in ("name", "timezone"))
    return Places(
        name=frame["station"].to_numpy(dtype=object),
        label=label.where(label.notna(), "").to_numpy(dtype=object),
        latitude=frame["latitude"].to_numpy(dtype=np.float64, copy=True),
        longitude=frame["longitude"].to_numpy(dtype=np.float64, copy=True),
        minimum_connection=frame["minimum_connection"].to_numpy(dtype=np.float64, copy=True),
        timezone=timezone.where(timezone.notna(), "").to_numpy(dtype=object),
        complete=complete,
    )
