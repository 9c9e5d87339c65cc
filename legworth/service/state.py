"""What a running service holds: store, night, ledger, seats left, tokens; and how it follows the store."""

from __future__ import annotations

import asyncio
import contextlib
import gc
import time
from collections.abc import AsyncIterator, Callable
from dataclasses import dataclass, field
from datetime import datetime
from typing import TypeVar

import structlog

from legworth.service.asking_many import Turns
from legworth.service.counted_legs import CountedLegs
from legworth.service.errors import NoNightError
from legworth.service.ledger import Ledger
from legworth.service.orders import Order, Outcome, Overwriting, SeatCount
from legworth.service.seats import SeatsLeft
from legworth.service.served_night import ServedNight
from legworth.service.settings import ServiceSettings
from legworth.service.tokens import TokenFile
from legworth.service.writer import LedgerWriter
from legworth.store import NightDamagedError, Store
from network.counted import counted

__all__ = ["STORE", "TROUBLES", "ServiceState"]

STORE, LEDGER = "store", "ledger"
TROUBLES = (STORE, LEDGER)
"""What can be wrong with a running service."""
MEND = "`legworth nights verify` says what is wrong, and `legworth nights restore` puts a sound one in force"


T = TypeVar("T")


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
    troubles
        What is wrong at present: for ``STORE`` and ``LEDGER`` the reason.
    damaged
        Whether the trouble with the store is a damaged night.
    unused
        How many nights the store holds while none is in force.
    latest_counts
        What the latest snapshot of counts held, None if none has come.
    turns
        Whose turn it is among the batches that are judged.
    when_taken_over
        Called with every night that is taken over while the service runs, in the loop that answers requests.
    """

    store: Store
    settings: ServiceSettings
    ledger: Ledger
    writer: LedgerWriter
    seats: SeatsLeft
    tokens: TokenFile
    served: ServedNight | None = None
    ahead: float = 0.0
    troubles: dict[str, str] = field(default_factory=dict)
    damaged: bool = False
    unused: int = 0
    latest_counts: CountedLegs | None = None
    turns: Turns = field(default_factory=Turns)
    when_taken_over: list[Callable[[ServedNight], None]] = field(default_factory=list)

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
            If the ledger cannot be opened or read. A damaged night is no reason not to start: the service answers that
            it has no night, takes cancellations, and follows the store until there is a sound one.
        """
        ledger = Ledger(settings.ledger_url(store.path))
        seats = SeatsLeft(ledger)
        writer = LedgerWriter(ledger, settings.waiting_limit, seats.note)
        state = cls(store, settings, ledger, writer, seats, TokenFile(store.path / "tokens.json"))
        state.ahead = 0.0 if at is None else at.timestamp() - time.time()
        state._try(STORE, state.look)
        return state

    def now(self) -> float:
        """Return the present instant by the service's clock, seconds since 1970-01-01 UTC."""
        return time.time() + self.ahead

    def stop(self) -> None:
        """Carry out the orders that wait, and close the ledger."""
        self.writer.close()
        self.ledger.close()

    def night(self) -> ServedNight:
        """Return the night in force; `NoNightError` if there is none that can be served."""
        if self.served is None:
            raise NoNightError(self._why_none())
        return self.served

    def _why_none(self) -> str:
        """Why no night is served."""
        if STORE in self.troubles:
            return self.trouble(STORE)
        if self.unused:
            return (
                f"no night is in force, though the store holds {counted(self.unused, 'night')}; publish one with "
                "`legworth refresh`, or put one of them in force with `legworth nights restore`"
            )
        return "the store has no night yet; publish one with `legworth refresh`"

    def trouble(self, what: str) -> str:
        """Say what is wrong with the store or the ledger, and what is done meanwhile; the log says why."""
        if what == LEDGER:
            return "the ledger cannot be read; seats left may be old, and orders are turned away"
        fault, more = "cannot be taken over", "the log says why"
        if self.damaged:
            fault, more = "or the file that names it, is damaged", MEND
        served = "no other one is served" if self.served is None else f"{self.served.name} is served as before"
        return f"the night in force{',' if self.damaged else ''} {fault}; {served}; {more}"

    def look(self) -> bool:
        """Take over the night in force if it is another one, after reading every file of it; True if it is.

        Raises
        ------
        NightDamagedError
            If it is damaged.
        """
        served = self.next_night()
        if served is None:
            return False
        self.serve(served)
        return True

    def next_night(self) -> ServedNight | None:
        """Read the night in force if it is another one than is served; raises as `look` does."""
        night = self.store.in_force()
        if night is None:
            self._see_why_none()
            return None
        if self.served is not None and night.name == self.served.name:
            return None
        faults = night.verify()
        if faults:
            raise NightDamagedError(f"night {night.name}, which is in force, is damaged: {faults[0]}")
        served = ServedNight(night, self.settings.parts_in_memory)
        self.seats.add(served.counts())
        return served

    def _see_why_none(self) -> None:
        """Count the nights of a store without one in force, which is a fault if one was in force before."""
        self.unused = len(self.store.nights())
        if self.served is not None:
            raise NightDamagedError(f"{self.store.path} no longer says which night is in force")

    def serve(self, night: ServedNight) -> None:
        """Answer by a night from now on."""
        self.served = night
        # What a night holds stays for a day: the collector need not look through it again and again.
        gc.freeze()
        structlog.get_logger().info("night taken over", night=night.name)
        for tell in self.when_taken_over:
            tell(night)

    async def follow(self) -> None:
        """Look at the store, and at the orders that other services carried out, again and again."""
        if self.served is not None:
            await self.served.warm(self.served.night.parts())
        while True:
            await asyncio.sleep(self.settings.follow_seconds)
            night = await asyncio.to_thread(self._try, STORE, self.next_night)
            if night is not None:
                # The parts that were asked for lately are read before the switch, so that nobody waits for them.
                lately = self.served.in_memory() if self.served is not None else []
                known = set(night.night.parts())
                await night.warm([name for name in lately if name in known])
                self.serve(night)
                await night.warm(night.night.parts())
            await asyncio.to_thread(self._try, LEDGER, self.seats.catch_up)

    def _try(self, what: str, work: Callable[[], T]) -> T | None:
        """Do some work; if it fails, whatever the reason, note and log that once, and go on with what there is."""
        try:
            found = work()
        except Exception as error:
            reason = str(error)[:1_000] or type(error).__name__
            if what == STORE:
                self.damaged = isinstance(error, NightDamagedError)
            if self.troubles.get(what) != reason:
                structlog.get_logger().error(self.trouble(what), error=reason)
            self.troubles[what] = reason
            return None
        if self.troubles.pop(what, None) is not None:
            structlog.get_logger().info(f"the {what} is in order again")
        return found

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
