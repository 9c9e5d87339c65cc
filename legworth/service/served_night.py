"""The night in force as the service uses it: where every leg and itinerary is, and the parts lately asked for."""

from __future__ import annotations

import asyncio
import contextlib
from collections import OrderedDict
from collections.abc import Iterable, Iterator, Sequence

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import structlog

from legworth.service.errors import NoNightError
from legworth.service.orders import SeatCount
from legworth.service.served_part import ServedPart, read_part
from legworth.store import Night

__all__ = ["NameIndex", "ServedNight"]


READ_TOGETHER = 2
"""Parts read at the same time: more would only keep answers waiting."""


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

    def codes_of(self, names: Sequence[str]) -> npt.NDArray[np.int32]:
        """(N,) code of the part of every name, -1 for unknown names."""
        wanted = np.array([name.encode() for name in names], dtype=np.bytes_)
        if not len(self._keys):
            return np.full(len(wanted), -1, dtype=np.int32)
        at = np.minimum(np.searchsorted(self._keys, wanted), len(self._keys) - 1)
        return np.where(self._keys[at] == wanted, self._parts[at], np.int32(-1))

    def by_part(self, codes: npt.NDArray[np.int32]) -> list[tuple[str | None, npt.NDArray[np.int64]]]:
        """Sort names by part.

        Parameters
        ----------
        codes
            What `codes_of` gives for them.

        Returns
        -------
        list of (str or None, array)
            Every part met, None for unknown names, and where its names stand among those given, in rising order.
        """
        if not len(codes):
            return []
        if (codes == codes[0]).all():
            return [(None if codes[0] < 0 else self._names[codes[0]], np.arange(len(codes)))]
        order = np.argsort(codes, kind="stable")
        met, begin = np.unique(codes[order], return_index=True)
        rows = np.split(order, begin[1:])
        return [(None if each < 0 else self._names[each], some) for each, some in zip(met, rows, strict=True)]

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
        self._reading: dict[str, asyncio.Task[ServedPart]] = {}
        self._few = asyncio.Semaphore(READ_TOGETHER)
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
        """A part, read from the store if it is not in memory; callers who want the same share one reading.

        Raises
        ------
        NoNightError
            If it cannot be read.
        """
        part = self.ready(name)
        if part is not None:
            return part
        reading = self._reading.get(name)
        if reading is None:
            reading = asyncio.create_task(self._read(name))
            self._reading[name] = reading
            reading.add_done_callback(lambda done: self._have_read(name, done))
        return await asyncio.shield(reading)

    async def warm(self, names: Iterable[str]) -> None:
        """Read some parts that are not in memory, as many as are kept; one that cannot be read is left out."""
        for name in list(names)[: self._kept]:
            if name not in self._parts:
                with contextlib.suppress(NoNightError):
                    await self.part(name)

    def in_memory(self) -> list[str]:
        """Names of the parts in memory."""
        return list(self._parts)

    async def _read(self, name: str) -> ServedPart:
        async with self._few:
            try:
                part = await asyncio.to_thread(read_part, self.night.folder / f"part={name}", name)
            except Exception as error:
                structlog.get_logger().error("part cannot be read", night=self.name, part=name, error=str(error)[:500])
                raise NoNightError(
                    f"part {name} of night {self.name} cannot be read; put a sound night in force"
                ) from error
        self._parts[name] = part
        while len(self._parts) > self._kept:
            self._parts.popitem(last=False)
        return part

    def _have_read(self, name: str, done: asyncio.Task[ServedPart]) -> None:
        self._reading.pop(name, None)
        if not done.cancelled():
            done.exception()  # told to those who wait, if any still do
