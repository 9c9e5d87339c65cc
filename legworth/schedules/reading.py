"""Schedules of any format that is known here, told apart by what they hold."""

from __future__ import annotations

import zipfile
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Literal

from legworth.schedules.flight_table import read_flight_table
from legworth.schedules.gtfs import GtfsOptions, read_gtfs
from legworth.schedules.operating_days import Window
from legworth.schedules.places import Places
from legworth.schedules.ssim import SsimOptions, read_ssim
from legworth.schedules.ssim_layout import TITLE
from legworth.schedules.timetable import Timetable
from network import Fault, InputError, SettingError
from network.faults import Faults

__all__ = ["ScheduleFormat", "ScheduleOptions", "read_schedule"]

ScheduleFormat = Literal["ssim", "gtfs", "csv"]

NAMES: dict[str, str] = {"ssim": "an airline schedule", "gtfs": "a GTFS feed", "csv": "a plain table of flights"}


@dataclass(frozen=True)
class ScheduleOptions:
    """How a schedule is read.

    Attributes
    ----------
    window
        Dates wanted.
    schedule_format
        Its format; None to tell by the file.
    ssim, gtfs
        What is taken from these formats.
    """

    window: Window
    schedule_format: ScheduleFormat | None = None
    ssim: SsimOptions = field(default_factory=SsimOptions)
    gtfs: GtfsOptions = field(default_factory=GtfsOptions)


def read_schedule(path: Path, places: Places, seats: Mapping[str, int], options: ScheduleOptions) -> Timetable:
    """Read a schedule and expand it to legs by date.

    Parameters
    ----------
    path
        The file, or the folder of a GTFS feed.
    places
        Known stations.
    seats
        Seats by equipment.
    options
        Dates and format.

    Raises
    ------
    InputError
        With everything that is wrong, by line and column.
    SettingError
        If the dates make too many legs, or none, or an option is for another format.
    """
    faults = Faults()
    try:
        timetable = _read(path, places, seats, options, faults)
    except OSError as error:
        problem = f"cannot be read ({error.strerror}); correct its name or its permissions, or give it anew"
        raise InputError([Fault(path.name, 0, "", problem)]) from error
    faults.raise_errors()
    if timetable is None:
        raise AssertionError("there is no timetable although no fault was noted")
    if len(timetable) == 0:
        window = options.window
        left = "; ".join(f"left out {count:,} {what}" for what, count in timetable.left_out.items())
        raise SettingError(
            f"nothing in {path.name} runs from {window.first} to {window.last}{' (' + left + ')' if left else ''}; "
            "choose other dates"
        )
    return replace(timetable.in_order(), warnings=tuple(faults.warnings))


def _read(
    path: Path, places: Places, seats: Mapping[str, int], options: ScheduleOptions, faults: Faults
) -> Timetable | None:
    if not path.exists():
        raise InputError([Fault(str(path), 0, "", "there is no such file; name a schedule")])
    kind = options.schedule_format or _format_of(path)
    _refuse_options_of_others(path, kind, options)
    if kind == "gtfs":
        return read_gtfs(path, options.window, places, seats, options.gtfs, faults)
    if path.is_dir():
        raise InputError([Fault(path.name, 0, "", "is a folder, which only a GTFS feed can be; name a file")])
    if kind == "csv":
        return read_flight_table(path, options.window, places, seats, faults)
    return read_ssim(path.name, path.read_bytes(), options.window, places, seats, options.ssim, faults)


def _refuse_options_of_others(path: Path, kind: ScheduleFormat, options: ScheduleOptions) -> None:
    """Refuse what is asked of another format, since it would not be done."""
    usual, given = SsimOptions(), options.ssim
    asked = (
        ("--service-types", "ssim", given.service_types != usual.service_types),
        ("--cabins", "ssim", given.cabins != usual.cabins),
        ("--partner-legs", "ssim", given.partner_legs != usual.partner_legs),
        ("--kinds", "gtfs", options.gtfs != GtfsOptions()),
    )
    for option, of, is_given in asked:
        if is_given and kind != of:
            raise SettingError(
                f"{option} is for {NAMES[of]}, and {path.name} is read as {NAMES[kind]}; leave it out, or name the "
                "format with --format"
            )


def _format_of(path: Path) -> ScheduleFormat:
    """Tell the format by what the file holds."""
    if path.is_dir() or zipfile.is_zipfile(path):
        return "gtfs"
    with path.open("rb") as file:
        start = file.read(200)
    if path.suffix == ".parquet" or start[:4] == b"PAR1":
        return "csv"
    if TITLE.encode() in start or (start[:1] == b"1" and b"," not in start):
        return "ssim"
    return "csv"
