"""The seats sold, leg by leg, and every sale and cancellation that made them so.

Counts and journal live in one database, SQLite or PostgreSQL. Orders are carried out in batches, each batch in one
transaction: all its legs are locked in the order of their names (so that no two writers can wait for each other), the
orders are judged one after the other against the counts as they then stand, and the counts and the journal are written
together. An order is acknowledged after its transaction has reached the disk. So two callers cannot both take the last
seat, a sale takes all its legs or none, and an order that is sent again under the same key finds its first answer.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from typing import Any, TypeVar

from sqlalchemy import Connection, Engine, Select, bindparam, func, insert, select, update
from sqlalchemy.exc import (
    ArgumentError,
    DBAPIError,
    IntegrityError,
    NoSuchModuleError,
    SQLAlchemyError,
)

from legworth.service.errors import LedgerError
from legworth.service.ledger_tables import durable_engine, journal, overwritings, seat_counts
from legworth.service.ledger_versions import bring_forward, make_ready
from legworth.service.orders import Batch, Cancellation, Order, Outcome, Sale, SeatCount, answer_order, present
from network import SettingError

__all__ = ["CarriedOut", "Ledger", "Progress"]

ATTEMPTS = 5
"""Times that a batch is tried when another writer got in its way."""
IN_THE_WAY = {"40001", "40P01"}
"""PostgreSQL's codes of transactions that failed because of another one: no order of events, deadlock."""

T = TypeVar("T")


@dataclass(frozen=True)
class CarriedOut:
    """What became of some orders.

    Attributes
    ----------
    outcomes
        For every order its outcome, or the error that kept it from being judged; such an order leaves no trace.
    counts
        Counts of the legs that moved, as they now stand.
    """

    outcomes: list[Outcome | Exception]
    counts: list[SeatCount]


@dataclass(frozen=True)
class Progress:
    """How far the journal and the overwritings have come: the numbers of their last rows."""

    journal: int
    overwritings: int


class Ledger:
    """Seat counts and journal in a database.

    Parameters
    ----------
    url
        SQLAlchemy URL, such as ``sqlite:////var/lib/legworth/seats.sqlite`` or ``postgresql+psycopg://…``.

    Raises
    ------
    SettingError
        If the URL cannot be used or its driver is not installed.
    LedgerError
        If the database cannot be reached, or the ledger in it is of another version.
    """

    def __init__(self, url: str) -> None:
        self.engine = _engine_of(url)
        try:
            make_ready(self.engine)
        except SQLAlchemyError as error:
            self.close()
            raise LedgerError(f"the ledger cannot be opened ({_cause(error)}); start the database") from error
        except LedgerError:
            self.close()
            raise

    @staticmethod
    def bring_forward(url: str) -> tuple[int, int]:
        """Bring an older ledger forward; see `ledger_versions.bring_forward`."""
        engine = _engine_of(url)
        try:
            return bring_forward(engine)
        finally:
            engine.dispose()

    def close(self) -> None:
        """Give the connections back."""
        self.engine.dispose()

    def counts(self, legs: Iterable[str] | None = None) -> dict[str, SeatCount]:
        """Counts by leg, of all legs or of some.

        Raises
        ------
        LedgerError
            If the database cannot be reached.
        """

        def read(connection: Connection) -> dict[str, SeatCount]:
            if legs is not None:
                return _counts_of(connection, sorted(legs), select(seat_counts))
            return {row.leg: SeatCount(*row) for row in connection.execute(select(seat_counts))}

        return self._reading(read)

    def progress(self) -> Progress:
        """Tell how far the ledger has come; raises as `counts` does."""

        def read(connection: Connection) -> Progress:
            last = (connection.scalar(select(func.max(table.c.number))) for table in (journal, overwritings))
            return Progress(*(number or 0 for number in last))

        return self._reading(read)

    def moved_legs(self, since: Progress) -> set[str]:
        """Legs whose counts orders and overwritings have moved since some progress; raises as `counts` does."""

        def read(connection: Connection) -> set[str]:
            orders = select(journal.c.legs).where(journal.c.number > since.journal, journal.c.accepted)
            legs = {leg for path in connection.scalars(orders) for leg in path.split()}
            counted = select(overwritings.c.leg).where(overwritings.c.number > since.overwritings)
            return legs | set(connection.scalars(counted))

        return self._reading(read)

    def _reading(self, work: Callable[[Connection], T]) -> T:
        """Read something, all of it from one moment on SQLite."""
        try:
            with self.engine.connect().execution_options(reading=True) as connection:
                return work(connection)
        except SQLAlchemyError as error:
            raise LedgerError(f"the ledger cannot be read ({_cause(error)}); ask again") from error

    def add_legs(self, legs: Iterable[SeatCount]) -> int:
        """Add the legs that the ledger does not know, with the counts given, and tell how many there were."""
        wanted = {count.leg: count for count in legs}

        def add(connection: Connection) -> int:
            known = set(connection.scalars(select(seat_counts.c.leg)))
            fresh = [vars(count) for leg, count in sorted(wanted.items()) if leg not in known]
            if fresh:
                connection.execute(insert(seat_counts), fresh)
            return len(fresh)

        return self._in_transaction(add)

    def overwrite(self, counts: Sequence[SeatCount], who: str, why: str) -> list[SeatCount]:
        """Replace counts by those of the carrier's own inventory; every leg that moves gets an audit row.

        Returns
        -------
        list of SeatCount
            The counts that moved or are new.
        """
        wanted = {count.leg: count for count in counts}

        def replace(connection: Connection) -> list[SeatCount]:
            before = _locked(connection, wanted)
            moved = [count for leg, count in sorted(wanted.items()) if before.get(leg) != count]
            now = present()
            rows = [
                {
                    "capacity_before": before[count.leg].capacity if count.leg in before else None,
                    "sold_before": before[count.leg].sold if count.leg in before else None,
                    "who": who,
                    "why": why,
                    "at": now,
                    **vars(count),
                }
                for count in moved
            ]
            _write_counts(connection, [count for count in moved if count.leg in before])
            fresh = [vars(count) for count in moved if count.leg not in before]
            if fresh:
                connection.execute(insert(seat_counts), fresh)
            if rows:
                connection.execute(insert(overwritings), rows)
            return moved

        return self._in_transaction(replace)

    def carry_out(self, orders: Sequence[Order]) -> CarriedOut:
        """Carry out orders in one transaction, one after the other.

        Raises
        ------
        LedgerError
            If the transaction did not reach the disk, as far as is known. Sending the same orders again under the same
            keys is safe.
        """
        return self._in_transaction(lambda connection: self._carry_out(connection, orders))

    def _carry_out(self, connection: Connection, orders: Sequence[Order]) -> CarriedOut:
        named = {order.sale for order in orders if isinstance(order, Cancellation)}
        sold = select(journal.c.key, journal.c.legs, journal.c.seats).where(
            journal.c.key.in_(sorted(named)), journal.c.kind == "sale", journal.c.accepted
        )
        sales = {key: (tuple(legs.split()), seats) for key, legs, seats in connection.execute(sold)} if named else {}
        legs = {leg for path, _ in sales.values() for leg in path}
        legs.update(leg for order in orders if isinstance(order, Sale) for leg in order.legs)
        counts = _locked(connection, legs)
        # Only now, with the legs locked, can no other writer be at work on the same keys.
        keys = sorted({order.key for order in orders})
        known = {row.key: row for row in connection.execute(select(journal).where(journal.c.key.in_(keys)))}
        back = (
            select(journal.c.sale, func.sum(journal.c.seats))
            .where(journal.c.sale.in_(sorted(sales)), journal.c.accepted)
            .group_by(journal.c.sale)
        )
        cancelled = {sale: int(seats) for sale, seats in connection.execute(back)} if sales else {}
        batch = Batch(counts, known, sales, cancelled, [], set())
        found: list[Outcome | Exception] = []
        for order in orders:
            try:
                found.append(answer_order(batch, order))
            except Exception as error:  # one bad order must not undo the others
                found.append(error)
        changed = [batch.counts[leg] for leg in sorted(batch.changed)]
        _write_counts(connection, changed)
        if batch.entries:
            connection.execute(insert(journal), batch.entries)
        return CarriedOut(found, changed)

    def _in_transaction(self, work: Callable[[Connection], T]) -> T:
        """Do some work in a transaction, again if another writer got in the way."""
        for attempt in range(1, ATTEMPTS + 1):
            try:
                with self.engine.begin() as connection:
                    return work(connection)
            except SQLAlchemyError as error:
                if attempt == ATTEMPTS or not _in_the_way(error):
                    raise LedgerError(
                        f"the ledger could not write ({_cause(error)}); send the order again under the same key"
                    ) from error
        raise AssertionError("a last attempt either returns or raises")


def _engine_of(url: str) -> Engine:
    try:
        return durable_engine(url)
    except (ArgumentError, NoSuchModuleError, ModuleNotFoundError) as error:
        raise SettingError(f"the database URL cannot be used ({error}); correct it or install its driver") from error


def _locked(connection: Connection, legs: Iterable[str]) -> dict[str, SeatCount]:
    """Lock the counts of some legs, always in the order of their names, and read them."""
    return _counts_of(connection, sorted(legs), select(seat_counts).order_by(seat_counts.c.leg).with_for_update())


def _counts_of(connection: Connection, names: Sequence[str], statement: Select[Any]) -> dict[str, SeatCount]:
    found: dict[str, SeatCount] = {}
    for begin in range(0, len(names), 10_000):
        for row in connection.execute(statement.where(seat_counts.c.leg.in_(names[begin : begin + 10_000]))):
            found[row.leg] = SeatCount(*row)
    return found


def _write_counts(connection: Connection, counts: Sequence[SeatCount]) -> None:
    if counts:
        statement = (
            update(seat_counts)
            .where(seat_counts.c.leg == bindparam("at_leg"))
            .values(capacity=bindparam("new_capacity"), sold=bindparam("new_sold"))
        )
        rows = [{"at_leg": c.leg, "new_capacity": c.capacity, "new_sold": c.sold} for c in counts]
        connection.execute(statement, rows)


def _in_the_way(error: SQLAlchemyError) -> bool:
    """Whether another writer made a transaction fail, so that it may well succeed now."""
    if isinstance(error, IntegrityError):
        return True
    code = getattr(error.orig, "sqlstate", None) if isinstance(error, DBAPIError) else None
    return code in IN_THE_WAY or (isinstance(error, DBAPIError) and error.connection_invalidated)


def _cause(error: SQLAlchemyError) -> str:
    cause: BaseException = (error.orig if isinstance(error, DBAPIError) else None) or error
    return next(iter(str(cause).strip().splitlines()), type(cause).__name__)
