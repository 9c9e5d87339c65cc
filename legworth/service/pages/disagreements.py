"""Disagreements by money: products that one control sells and the other refuses, as a list and as CSV."""

from __future__ import annotations

import asyncio
import csv
import io
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Annotated, Any

from fastapi import Depends, Query, Request
from starlette.responses import Response, StreamingResponse

from legworth.report import ALONE
from legworth.service.pages.night_index import NightIndex
from legworth.service.pages.routes import page_router, planner_of
from legworth.service.wording import AMOUNT

__all__ = ["Filter", "pages", "safe_cell"]

PER_PAGE = 50
ROWS_AT_ONCE = 5_000
COLUMNS = (
    "itinerary", "legs", "origin", "destination", "date", "departs", "fare_class", "fare", "displacement",
    "contribution", "disagreement", "at_stake",
)  # fmt: skip
SORTS = {
    "at_stake": "at_stake",
    "contribution": "contribution",
    "fare": "fare",
    "displacement": "displacement",
    "itinerary": "number",
    "fare_class": "fare_class",
    "departs": "departs_rank",
}

pages = page_router()


@dataclass(frozen=True)
class Filter:
    """What to list.

    Attributes
    ----------
    leg, station, fare_class, sold_by
        Only products that use the leg, that begin or end at the station, of the fare class, or that this control
        alone sells; all if empty.
    least
        Only products with at least so much money at stake.
    sort, down
        Order.
    """

    leg: str = ""
    station: str = ""
    fare_class: str = ""
    sold_by: str = ""
    least: float = 0.0
    sort: str = "at_stake"
    down: bool = True

    @property
    def query(self) -> dict[str, Any]:
        """The filter as the query of an address."""
        return {
            "leg": self.leg,
            "station": self.station,
            "fare_class": self.fare_class,
            "sold_by": self.sold_by,
            "least": f"{self.least:g}" if self.least else "",
        }

    @property
    def whole_query(self) -> dict[str, Any]:
        """Filter and order as the query of an address."""
        return {**self.query, "sort": self.sort, "down": str(self.down).lower()}

    def where(self) -> tuple[str, list[Any]]:
        """The condition, and its values."""
        terms: list[str] = ["at_stake >= ?"]
        values: list[Any] = [self.least]
        if self.leg:
            terms.append("number IN (SELECT number FROM itineraries WHERE list_contains(string_split(legs, ' '), ?))")
            values.append(self.leg)
        if self.station:
            terms.append("number IN (SELECT number FROM itineraries WHERE origin = ? OR destination = ?)")
            values += [self.station, self.station]
        if self.fare_class:
            terms.append("fare_class = ?")
            values.append(self.fare_class)
        if self.sold_by:
            terms.append("by_network = ?")
            values.append(self.sold_by == "network_only")
        return " AND ".join(terms), values

    def order_by(self) -> str:
        """The order, whole: no two rows are alike in it."""
        return f"{SORTS[self.sort]} {'DESC' if self.down else 'ASC'}, number, fare_class"


async def chosen(
    leg: Annotated[str, Query(max_length=200)] = "",
    station: Annotated[str, Query(max_length=200)] = "",
    fare_class: Annotated[str, Query(max_length=200)] = "",
    sold_by: Annotated[str, Query(max_length=20)] = "",
    least: Annotated[str, Query(max_length=20, pattern=AMOUNT)] = "",
    sort: Annotated[str, Query(max_length=20)] = "at_stake",
    down: bool = True,
) -> Filter:
    """Read the filter from an address; what cannot be is passed over."""
    return Filter(
        leg=leg.strip(),
        station=station.strip(),
        fare_class=fare_class.strip(),
        sold_by=sold_by if sold_by in ALONE else "",
        least=float(least.strip() or 0),
        sort=sort if sort in SORTS else "at_stake",
        down=down,
    )


Asked = Annotated[Filter, Depends(chosen)]


@pages.get("/disagreements")
async def disagreements(
    request: Request, asked: Asked, page: Annotated[int, Query(ge=1, le=1_000_000)] = 1
) -> Response:
    """List them."""
    planner = await planner_of(request)
    model = await asyncio.to_thread(_model, planner.index, asked, page)
    return await planner.page("disagreements.html", asked=asked, alone=ALONE, **model)


def _model(index: NightIndex, asked: Filter, page: int) -> dict[str, Any]:
    where, values = asked.where()
    total = index.rows(
        f"SELECT count(*) AS products, coalesce(sum(at_stake), 0) AS money FROM disagreements WHERE {where}", *values
    )[0]
    last = max(1, -(-total["products"] // PER_PAGE))
    page = min(page, last)
    rows = index.disagreements(where, values, asked.order_by(), PER_PAGE, (page - 1) * PER_PAGE)
    classes = index.rows("SELECT DISTINCT fare_class FROM disagreements ORDER BY fare_class")
    return {
        "rows": rows,
        "total": total,
        "page": page,
        "last": last,
        "per_page": PER_PAGE,
        "classes": [row["fare_class"] for row in classes],
    }


@pages.get("/disagreements.csv")
async def as_csv(request: Request, asked: Asked) -> Response:
    """All of them as CSV (RFC 4180)."""
    planner = await planner_of(request)
    name = f"disagreements-{planner.night.name}.csv"
    headers = {"Content-Disposition": f'attachment; filename="{name}"'}
    return StreamingResponse(_lines(planner.index, asked), media_type="text/csv; charset=utf-8", headers=headers)


def _lines(index: NightIndex, asked: Filter) -> Iterator[str]:
    where, values = asked.where()
    text = io.StringIO()
    writer = csv.writer(text)
    writer.writerow(COLUMNS)
    for rows in index.all_disagreements(where, values, asked.order_by(), ROWS_AT_ONCE):
        writer.writerows([safe_cell(cell) for cell in row] for row in rows)
        yield text.getvalue()
        text.seek(0)
        text.truncate()
    yield text.getvalue()


def safe_cell(cell: Any) -> Any:
    """Return a cell that no spreadsheet takes for a formula: text that begins like one gets an apostrophe before it.

    The beginnings are those that OWASP lists under CSV injection (from memory).

    Examples
    --------
    >>> safe_cell("=1+1"), safe_cell("B-2"), safe_cell(-3.5)
    ("'=1+1", 'B-2', -3.5)
    """
    return f"'{cell}" if isinstance(cell, str) and cell[:1] in ("=", "+", "-", "@", "\t", "\r", "\n") else cell
