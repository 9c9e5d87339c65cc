"""Fields of airline schedule records: what their text means, for whole columns at once."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import date

import numpy as np
import numpy.typing as npt

from legworth.schedules.periodic import NO_VARIATION
from legworth.schedules.ssim_layout import Field
from legworth.schedules.ssim_records import SsimRecords
from network.arrays import BoolArray, IntArray
from network.faults import Faults

__all__ = [
    "DESIGNATOR",
    "OPEN_END",
    "FieldReader",
    "clock_time",
    "date_reader",
    "date_variation",
    "days_of_operation",
    "flight_number",
    "frequency",
    "leg_number",
    "read_period",
    "utc_variation",
    "variation_number",
]

OPEN_END = 10**7
"""Day that stands for an open end of a period."""

MONTHS = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")
DESIGNATOR = r"(?!\d\d)(?:[A-Z0-9]{2} |[A-Z]{3})"
"""Airline designator: two letters or digits, not both digits, or three letters."""

DATE = "is not a date; write it like 01MAR27"
GREATEST_VARIATION = 14 * 60
"""Minutes from UTC beyond which no clock on Earth is set (W3C XML Schema Part 2, 3.2.7.3)."""


@dataclass
class FieldReader:
    """Reads fields of records of one type; rows with a field that cannot be read are marked in ``bad``."""

    records: SsimRecords
    faults: Faults
    bad: BoolArray = field(init=False)

    def __post_init__(self) -> None:
        self.bad = np.zeros(len(self.records), dtype=bool)

    def values(self, where: Field, meaning: Callable[[str], int | None], wanted: str) -> IntArray:
        """Read a field as whole numbers.

        Parameters
        ----------
        where
            The field.
        meaning
            Turns its text, blanks included, into a number; None if that is not possible.
        wanted
            What the field must be, and what would mend it, for faults.

        Returns
        -------
        IntArray
            (n,) values, 0 where there is none.
        """
        texts, at = self._distinct(where)
        found = [meaning(text) for text in texts]
        unreadable = np.array([value is None for value in found], dtype=bool)[at]
        self.records.note(
            self.faults, np.flatnonzero(unreadable), where.column, lambda row: f"{texts[at[row]]!r} {wanted}"
        )
        self.bad |= unreadable
        values: IntArray = np.array([value or 0 for value in found], dtype=np.int64)[at]
        return values

    def words(self, where: Field, shape: str, wanted: str) -> tuple[IntArray, list[str]]:
        """Read a field as one of the words that fit a pattern; (n,) positions and the words, blanks around stripped."""
        texts, at = self._distinct(where)
        fits = re.compile(shape)
        unreadable = np.array([fits.fullmatch(text) is None for text in texts], dtype=bool)[at]
        self.records.note(
            self.faults, np.flatnonzero(unreadable), where.column, lambda row: f"{texts[at[row]]!r} {wanted}"
        )
        self.bad |= unreadable
        return at, [text.strip() for text in texts]

    def _distinct(self, where: Field) -> tuple[list[str], IntArray]:
        """Different texts of a field, at full width, and the position of each row's among them."""
        text = self.records.text(where)
        if where.width > 8:
            values, at = np.unique(text, return_inverse=True)
            return [value.decode("ascii").ljust(where.width) for value in values.tolist()], at
        wide: npt.NDArray[np.bytes_] = text.astype("S8")
        keys, at = np.unique(wide.view(">u8").ravel() if len(wide) else np.zeros(0, ">u8"), return_inverse=True)
        return [key.to_bytes(8, "big").rstrip(b"\0").decode("ascii").ljust(where.width) for key in keys.tolist()], at


def date_reader(around: date) -> Callable[[str], int | None]:
    """Return the reader of dates like 01MAR27, of the century that brings them closest to a date.

    It gives days since 1970, and `OPEN_END` for 00XXX00.
    """
    century = around.year // 100 * 100

    def read(text: str) -> int | None:
        if text == "00XXX00":
            return OPEN_END
        if not re.fullmatch(r"\d{2}[A-Z]{3}\d{2}", text) or text[2:5] not in MONTHS:
            return None
        years = [century + shift + int(text[5:]) for shift in (-100, 0, 100)]
        year = min(years, key=lambda year: abs(year - around.year))
        try:
            return (date(year, MONTHS.index(text[2:5]) + 1, int(text[:2])) - date(1970, 1, 1)).days
        except ValueError:
            return None

    return read


def days_of_operation(text: str) -> int | None:
    """Days of the week as bits, from seven places that hold their own number or a blank."""
    if any(sign not in (" ", str(place)) for place, sign in enumerate(text, 1)) or not text.strip():
        return None
    return sum(1 << place for place, sign in enumerate(text) if sign != " ")


def frequency(text: str) -> int | None:
    """Weeks between operations: 1 if blank."""
    return {" ": 1, "1": 1, "2": 2}.get(text)


def clock_time(text: str) -> int | None:
    """Minutes of the day from HHMM; 2400 is the end of the day."""
    if not re.fullmatch(r"\d{4}", text):
        return None
    minutes = int(text[:2]) * 60 + int(text[2:])
    return minutes if int(text[2:]) < 60 and minutes <= 1440 else None


def utc_variation(text: str) -> int | None:
    """Minutes east of UTC from +HHMM or -HHMM; `NO_VARIATION` if blank."""
    if not text.strip():
        return NO_VARIATION
    if not re.fullmatch(r"[+-]\d{4}", text) or int(text[3:]) >= 60:
        return None
    minutes = int(text[1:3]) * 60 + int(text[3:])
    return None if minutes > GREATEST_VARIATION else -minutes if text[0] == "-" else minutes


def date_variation(text: str) -> int | None:
    """Days after the date of operation: blank or 0 to 7, A for the day before."""
    if text == " ":
        return 0
    return -1 if text == "A" else int(text) if text in "01234567" else None


def flight_number(text: str) -> int | None:
    """Flight number of up to four digits, blanks before or after."""
    number = text.strip()
    return int(number) if re.fullmatch(r"\d{1,4}", number) and int(number) else None


def leg_number(text: str) -> int | None:
    """Leg sequence number from 1 to 99."""
    return int(text) if re.fullmatch(r"\d{2}", text) and int(text) else None


def variation_number(text: str) -> int | None:
    """Itinerary variation identifier, 01 to 99, its hundreds apart."""
    return int(text) if re.fullmatch(r"\d{2}", text) else None


def read_period(read: FieldReader, start: Field, end: Field, around: date) -> tuple[IntArray, IntArray]:
    """First and last day; notes periods that end before they begin, and open beginnings."""
    dates = date_reader(around)
    first, last = read.values(start, dates, DATE), read.values(end, dates, DATE + ", or 00XXX00 for an open end")
    sound = ~read.bad
    unbegun = sound & (first == OPEN_END)
    read.records.note(
        read.faults, np.flatnonzero(unbegun), start.column, lambda _: "00XXX00 may only end a period; write a date"
    )
    turned = sound & ~unbegun & (last < first)
    read.records.note(
        read.faults,
        np.flatnonzero(turned),
        end.column,
        lambda _: "the period ends before it begins; correct one of the dates",
    )
    read.bad |= unbegun | turned
    return first, last
