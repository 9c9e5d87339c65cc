"""What a running service holds: store, night, ledger, seats left, tokens; and how it follows the store."""

from __future__ import annotations

import asyncio
import contextlib
import time
from collections.abc import AsyncIterator
from dataclasses import dataclass
from datetime import datetime

import structlog

from legworth.service.errors import NoNightError
from legworth.service.ledger import Ledger
from legworth.service.orders import Order, Outcome, Overwriting, SeatCount
from legworth.service.seats import SeatsLeft
from legworth.service.served_night import ServedNight
from legworth.service.settings import ServiceSettings
from legworth.service.tokens import TokenFile
from legworth.service.writer import LedgerWriter
from legworth.store import Store
from network.errors import LegworthError

__all__ = ["ServiceState"]


@dataclass(eq=False)
class ServiceState:
    """Everything that requests share; made once, when the service starts.

    Attributes
    ----------
    store, settings, ledger, writer, seats, tokens
        As their classes say.
    served
        The night in force, None as long as there is none.
    ahead
        Seconds by which the service's clock is ahead of the machine's, for drills; 0 otherwise.
    """

    store: Store
    settings: ServiceSettings
    ledger: Ledger
    writer: LedgerWriter
    seats: SeatsLeft
    tokens: TokenFile
    served: ServedNight | None = None
    ahead: float = 0.0

    @classmethod
    def start(cls, store: Store, settings: ServiceSettings, at: datetime | None = None) -> ServiceState:
        """Open the ledger and read the night in force.

        Parameters
        ----------
        store, settings
            What to serve, and how.
        at
            Instant that the service's clock begins at, for drills; the present one if not given.

        Raises
        ------
        LegworthError
            If the ledger cannot be opened, or the night in force is damaged.
        """
        ledger = Ledger(settings.database or f"sqlite:///{store.path.resolve() / 'seats.sqlite'}")
        seats = SeatsLeft(ledger)
        writer = LedgerWriter(ledger, settings.waiting_limit, seats.note)
        state = cls(store, settings, ledger, writer, seats, TokenFile(store.path / "tokens.json"))
        state.ahead = 0.0 if at is None else at.timestamp() - time.time()
        state.look()
        return state

    def now(self) -> float:
        """Return the present instant by the service's clock, seconds since 1970-01-01 UTC."""
        return time.time() + self.ahead

    def stop(self) -> None:
        """Carry out the orders that wait, and close the ledger."""
        self.writer.close()
        self.ledger.close()

    def night(self) -> ServedNight:
        """Return the night in force; `NoNightError` if there is none."""
        if self.served is None:
            raise NoNightError("no night is in force yet; publish one with legworth refresh")
        return self.served

    def look(self) -> bool:
        """Take over the night in force if it is another one; True if it is."""
        night = self.store.in_force()
        if night is None or (self.served is not None and night.name == self.served.name):
            return False
        served = ServedNight(night, self.settings.parts_in_memory)
        self.seats.add(served.counts())
        self.served = served
        return True

    async def follow(self) -> None:
        """Look at the store, and at the counts that other services may have moved, again and again."""
        log = structlog.get_logger()
        troubled = ""
        while True:
            await asyncio.sleep(self.settings.follow_seconds)
            try:
                if await asyncio.to_thread(self.look):
                    log.info("night taken over", night=self.night().name)
                if not self.alone:
                    await asyncio.to_thread(self.seats.reload)
                troubled = ""
            except LegworthError as error:
                if str(error) != troubled:
                    log.error("the store cannot be followed; the night before stays in force here", error=str(error))
                troubled = str(error)

    @property
    def alone(self) -> bool:
        """Whether no other service can write this ledger: a file of the store's own."""
        return self.settings.database is None

    async def carry_out(self, order: Order) -> Outcome:
        """Carry an order out; its outcome is on the disk when this returns."""
        return await asyncio.wrap_future(self.writer.submit(order))

    async def overwrite(self, order: Overwriting) -> list[SeatCount]:
        """Overwrite counts; gives those that moved, once they are on the disk."""
        return await asyncio.wrap_future(self.writer.overwrite(order))

    @contextlib.asynccontextmanager
    async def running(self) -> AsyncIterator[None]:
        """Follow the store for as long as the service runs."""
        task = asyncio.create_task(self.follow())
        try:
            yield
        finally:
            task.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await task
            await asyncio.to_thread(self.stop)
