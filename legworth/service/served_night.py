"""The night in force as the service uses it: where every leg and itinerary is, and the parts lately asked for."""

from __future__ import annotations

import asyncio
from collections import OrderedDict
from collections.abc import Iterator

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from legworth.service.orders import SeatCount
from legworth.service.served_part import ServedPart, read_part
from legworth.store import Night

__all__ = ["NameIndex", "ServedNight"]


class NameIndex:
    """Finds the part of a name among millions, in sorted bytes rather than one Python object a name.

    Parameters
    ----------
    names, parts
        Names, each once, and the part of each.
    """

    def __init__(self, names: pa.ChunkedArray, parts: pa.ChunkedArray) -> None:
        coded = parts.combine_chunks()
        coded = coded if pa.types.is_dictionary(coded.type) else coded.dictionary_encode()
        plain = names.cast(pa.string()).cast(pa.binary()).to_numpy(zero_copy_only=False)
        keys: npt.NDArray[np.bytes_] = np.array(plain, dtype=np.bytes_)
        order = np.argsort(keys, kind="stable")
        self._keys = keys[order]
        self._parts = coded.indices.to_numpy(zero_copy_only=False).astype(np.int32)[order]
        self._names = coded.dictionary.to_pylist()

    def __len__(self) -> int:
        return len(self._keys)

    def part_of(self, name: str) -> str | None:
        """Part of a name, None if it is unknown."""
        key = name.encode()
        at = int(np.searchsorted(self._keys, np.bytes_(key)))
        found = at < len(self._keys) and self._keys[at] == key
        return self._names[self._parts[at]] if found else None


class ServedNight:
    """A published night.

    Parameters
    ----------
    night
        The night.
    kept
        Parts kept in memory, the latest used.
    """

    def __init__(self, night: Night, kept: int) -> None:
        self.night = night
        self.name = night.name
        self._kept = kept
        self._parts: OrderedDict[str, ServedPart] = OrderedDict()
        self._reading: dict[str, asyncio.Future[ServedPart]] = {}
        legs = night.table("legs", ["leg", "capacity", "sold"])
        itineraries = night.table("itineraries", ["itinerary"])
        self.legs = NameIndex(legs["leg"], legs["part"])
        self.itineraries = NameIndex(itineraries["itinerary"], itineraries["part"])
        self._legs = legs

    def counts(self) -> Iterator[SeatCount]:
        """Seats of every leg at the snapshot."""
        columns = (self._legs[name].to_pylist() for name in ("leg", "capacity", "sold"))
        return (SeatCount(*row) for row in zip(*columns, strict=True))

    def ready(self, name: str) -> ServedPart | None:
        """A part if it is in memory."""
        part = self._parts.get(name)
        if part is not None:
            self._parts.move_to_end(name)
        return part

    async def part(self, name: str) -> ServedPart:
        """A part, read from the store if it is not in memory; callers who want the same share one reading."""
        part = self.ready(name)
        if part is not None:
            return part
        reading = self._reading.get(name)
        if reading is None:
            folder = self.night.folder / f"part={name}"
            reading = asyncio.ensure_future(asyncio.to_thread(read_part, folder, name))
            self._reading[name] = reading
            reading.add_done_callback(lambda _: self._reading.pop(name, None))
        part = await asyncio.shield(reading)
        self._parts[name] = part
        while len(self._parts) > self._kept:
            self._parts.popitem(last=False)
        return part
