"""The night that the pages show: a new one as soon as its lists are made, the one before until then.

Requests are judged by a new night at once. The lists that pages need take seconds for a whole year, so they are made
in a thread of low priority from the moment the service takes a night over, not when the first planner asks.
"""

from __future__ import annotations

import asyncio
import contextlib
import os
import sys
import threading
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from time import monotonic

import structlog

from legworth.service.pages.night_index import NightIndex
from legworth.service.served_night import ServedNight
from network.errors import LegworthError

__all__ = ["PagesWaitError", "Preparation", "ShownNight"]

PATIENCE = 1.5
"""Seconds that a page waits for the first lists of all before it says so; it then looks again by itself."""
NICENESS = 10
"""How far the thread that makes lists stands behind all others, on the scale of the system's ``nice``."""
AGAIN = 10.0
"""Seconds after which lists that could not be made are tried again, if a page is asked for."""


class PagesWaitError(LegworthError):
    """The lists of the first night are not made yet, so that there is nothing to show."""

    http_status = 503


@dataclass(frozen=True, eq=False)
class ShownNight:
    """A night whose pages can be shown: as requests are judged by it, and its lists."""

    night: ServedNight
    index: NightIndex


class Preparation:
    """Makes the lists of one night after the other; used from the loop that answers requests.

    Attributes
    ----------
    shown
        The latest night whose lists are made; None until the first are.
    error
        Why the lists of the latest night could not be made; None if they could, or are being made.
    """

    def __init__(self) -> None:
        self.shown: ShownNight | None = None
        self.error: BaseException | None = None
        self._tried_at = 0.0
        self._thread = ThreadPoolExecutor(1, thread_name_prefix="planner-night", initializer=stand_back)
        self._making: tuple[ServedNight, NightIndex, Future[None]] | None = None

    @property
    def trouble(self) -> str:
        """The error in words; empty if there is none."""
        return "" if self.error is None else str(self.error)[:1_000] or type(self.error).__name__

    def prepare(self, night: ServedNight) -> None:
        """Begin to make the lists of a night, unless they are made or being made; those of another one are given up."""
        if self.shown is not None and self.shown.night is night:
            return
        if self._making is not None and self._making[0] is night:
            if not (self.error and monotonic() - self._tried_at > AGAIN):
                return
        elif self._making is not None:
            self._making[1].give_up()
        index = NightIndex(night.night)
        self.error, self._tried_at = None, monotonic()
        making = self._thread.submit(index.make)
        self._making = night, index, making
        loop = asyncio.get_running_loop()

        def made(_: Future[None]) -> None:
            with contextlib.suppress(RuntimeError):  # the loop has ended
                loop.call_soon_threadsafe(self._made, night, index, making)

        making.add_done_callback(made)

    async def latest(self, night: ServedNight) -> ShownNight:
        """Give the night to show while another one, or this one, is in force.

        Raises
        ------
        PagesWaitError
            If no night can be shown yet.
        NightDamagedError
            If none can, because the lists of the first cannot be made.
        """
        self.prepare(night)
        if self.shown is None and self._making is not None:
            making = self._making
            with contextlib.suppress(Exception):  # told below
                await asyncio.wait_for(asyncio.shield(asyncio.wrap_future(making[2])), PATIENCE)
            if making[2].done():
                self._made(*making)
        if self.shown is not None:
            return self.shown
        if self.error is not None:
            raise self.error.with_traceback(None)
        raise PagesWaitError(f"the pages of night {night.name} are being made ready; look again in a moment")

    def close(self) -> None:
        """Give up what is being made."""
        making, self._making = self._making, None
        if making is not None:
            making[1].give_up()
        self._thread.shutdown(wait=True, cancel_futures=True)

    def _made(self, night: ServedNight, index: NightIndex, making: Future[None]) -> None:
        """Show a night whose lists are made, unless another one has come meanwhile."""
        if self._making is None or self._making[2] is not making or self.error is not None:
            return
        error = making.exception()
        if error is None:
            self.shown, self._making = ShownNight(night, index), None
            seconds = round(monotonic() - self._tried_at, 2)
            structlog.get_logger().info("pages of the night are ready", night=night.name, seconds=seconds)
        else:
            self.error = error
            structlog.get_logger().error(
                "pages of the night cannot be made ready", night=night.name, error=self.trouble
            )


def stand_back() -> None:
    """Lower the priority of this thread alone, where the system can: on Linux a thread has one of its own."""
    if sys.platform == "linux":
        with contextlib.suppress(OSError):
            os.setpriority(os.PRIO_PROCESS, threading.get_native_id(), NICENESS)
