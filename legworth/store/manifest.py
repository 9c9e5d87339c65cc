"""The manifest of a night: everything about it in one JSON document, declared once."""

from __future__ import annotations

import json
import re
from datetime import datetime
from functools import cached_property
from typing import Annotated, Any, Literal

from pydantic import AwareDatetime, BaseModel, ConfigDict, Field, ValidationError

from network.errors import NightDamagedError

__all__ = ["LAYOUT", "Check", "FileEntry", "Forced", "Manifest", "PartEntry", "night_name", "night_number"]

LAYOUT: Literal[1] = 1
"""Number of the layout of a store; another number means another program."""

NAME = re.compile(r"([0-9]{5,})-[0-9]{4}-[0-9]{2}-[0-9]{2}")


def night_name(number: int, as_of: datetime) -> str:
    """Name of a night: its number, which alone orders nights, and the local date of its snapshot."""
    return f"{number:05d}-{as_of:%Y-%m-%d}"


def night_number(name: str) -> int | None:
    """Return the number in the name of a night, None if it is no such name."""
    found = NAME.fullmatch(name)
    return int(found[1]) if found else None


class _Declared(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class FileEntry(_Declared):
    """One file."""

    sha256: Annotated[str, Field(pattern=r"^[0-9a-f]{64}$", description="SHA-256, hexadecimal.")]
    bytes: Annotated[int, Field(ge=0, description="Length in bytes.")]


class Check(_Declared):
    """One check of a night against the last."""

    name: Annotated[str, Field(description="What was looked at.")]
    limit: Annotated[float | None, Field(description="The limit set for it.")]
    found: Annotated[float | None, Field(description="What was found.")]
    passed: Annotated[bool, Field(description="Whether it lies within the limit.")]
    look_at: Annotated[tuple[str, ...], Field(description="What to look at first, worst first.")] = ()


class Forced(_Declared):
    """Who published a night that a check had stopped, and why."""

    who: Annotated[str, Field(min_length=1)]
    reason: Annotated[str, Field(min_length=1)]


class PartEntry(_Declared):
    """One part of a night."""

    name: Annotated[str, Field(min_length=1, description="Name of the part.")]
    legs: Annotated[int, Field(ge=0)]
    itineraries: Annotated[int, Field(ge=0)]
    products: Annotated[int, Field(ge=0)]
    objective: Annotated[
        float | None, Field(description="Revenue that the part's program expects to come, currency.")
    ] = None
    certificate: Annotated[dict[str, Any], Field(description="What was proved of its optimum.")] = {}
    fingerprints: Annotated[dict[str, str], Field(description="SHA-256 of what decides its results, by kind.")] = {}
    taken_over_from: Annotated[str | None, Field(description="Night whose results it shares, unsolved.")] = None
    seconds: Annotated[dict[str, float], Field(description="Seconds by phase.")] = {}

    @property
    def certificates(self) -> tuple[dict[str, Any], ...]:
        """Its certificates: one of its own, or one for each program that was solved."""
        if "holds" in self.certificate:
            return (self.certificate,)
        return tuple(found for found in self.certificate.values() if isinstance(found, dict))

    @property
    def certified(self) -> bool:
        """Whether it has certificates and all of them hold."""
        return bool(self.certificates) and all(found.get("holds") is True for found in self.certificates)


class Manifest(_Declared):
    """Everything about a night.

    `UnfinishedNight.publish` fills what only the finished night knows: ``published`` if it is not given, ``files``,
    ``rows``, ``columns`` and ``mixed``.
    """

    layout: Annotated[Literal[1], Field(description="Number of the layout of the store.")] = LAYOUT
    night: Annotated[str, Field(pattern=f"^{NAME.pattern}$", description="Name of the night.")]
    number: Annotated[int, Field(ge=1, description="Its number, which alone orders nights.")]
    network: Annotated[str | None, Field(description="Name of the network.")] = None
    currency: Annotated[str | None, Field(description="Currency of all prices.")] = None
    as_of: Annotated[AwareDatetime, Field(description="Instant of the snapshot that was priced.")]
    published: Annotated[
        AwareDatetime | None, Field(description="Instant of publication, by this machine's clock.")
    ] = None
    before: Annotated[str | None, Field(description="Night in force until then, which it was compared with.")] = None
    inputs: Annotated[dict[str, FileEntry], Field(description="Input files as they were read.")] = {}
    settings: Annotated[dict[str, Any], Field(description="Settings it was priced with.")] = {}
    versions: Annotated[dict[str, str], Field(description="Versions of program and libraries.")] = {}
    seed: Annotated[int | None, Field(description="Seed of the random generator, if one was used.")] = None
    checks: Annotated[tuple[Check, ...], Field(description="Checks against the night before.")] = ()
    forced: Annotated[Forced | None, Field(description="Who published it in spite of a check, and why.")] = None
    parts: Annotated[tuple[PartEntry, ...], Field(description="Its parts.")] = ()
    seconds: Annotated[dict[str, float], Field(description="Seconds by phase of the whole night.")] = {}
    rows: Annotated[dict[str, int], Field(description="Rows by table.")] = {}
    columns: Annotated[
        dict[str, dict[str, str]], Field(description="Columns by table: Arrow type by name, over all parts.")
    ] = {}
    mixed: Annotated[tuple[str, ...], Field(description="Tables whose columns are not the same in all parts.")] = ()
    files: Annotated[dict[str, FileEntry], Field(description="Every file of the night but the manifest.")] = {}

    @cached_property
    def part(self) -> dict[str, PartEntry]:
        """The parts by name."""
        return {part.name: part for part in self.parts}

    def as_bytes(self) -> bytes:
        """The JSON document, as it is stored and hashed."""
        return (self.model_dump_json(indent=1) + "\n").encode()

    @classmethod
    def from_bytes(cls, data: bytes, night: str) -> Manifest:
        """Read a manifest.

        Raises
        ------
        NightDamagedError
            If it is none, one of another layout, or that of another night.
        """
        try:
            found = cls.model_validate_json(data)
        except ValidationError as error:
            raise NightDamagedError(f"night {night}: {_why(data, error)}") from None
        if found.night != night or night_number(night) != found.number:
            raise NightDamagedError(f"the folder of night {night} holds the manifest of night {found.night}")
        return found


def _why(data: bytes, error: ValidationError) -> str:
    """Say what is wrong with a manifest, the layout first."""
    try:
        values = json.loads(data)
    except (ValueError, RecursionError):
        return "manifest.json is not JSON"
    layout = values.get("layout", LAYOUT) if isinstance(values, dict) else LAYOUT
    if layout != LAYOUT:
        return f"it has layout {layout}, not {LAYOUT}; use the program that wrote it"
    first = error.errors()[0]
    place = ".".join(map(str, first["loc"])) or "its content"
    return f"{place} in manifest.json is wrong ({first['msg']})"
