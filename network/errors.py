"""The one tree of errors, shared by every room of the house.

::

    LegworthError                exit 1, HTTP 500   anything this project raises on purpose
    |-- InputError               exit 2, HTTP 422   the tables or the request are wrong; lists every fault
    |-- SettingError             exit 2, HTTP 422   an option or a setting is out of its limits
    |   `-- StoreError           exit 2, HTTP 503   the store of nights cannot be used so: no space, no such night
    |       |-- StoreBusyError   exit 2, HTTP 503   another process is putting a night into it
    |       `-- NightDamagedError exit 2, HTTP 503  a night is missing, unreadable or not what its manifest says
    |-- SolveError               exit 3, HTTP 503   no certified optimum, so no bid price
    |   |-- SolverMissingError   the solver named is not installed or cannot be started
    |   |-- SolverStoppedError   the solver ended without an optimum (time limit, infeasible, crash)
    |   `-- NotCertifiedError    the solver claims an optimum that our own certificate does not confirm
    `-- NightStopped             exit 4, HTTP 409   a check stopped the night; the last one stays in force

Exit code 0 means that everything asked for was done; 130 that the user interrupted it.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, ClassVar

if TYPE_CHECKING:
    from network.faults import Fault

__all__ = [
    "InputError",
    "LegworthError",
    "NightDamagedError",
    "NightStopped",
    "NotCertifiedError",
    "SettingError",
    "SolveError",
    "SolverMissingError",
    "SolverStoppedError",
    "StoreBusyError",
    "StoreError",
]


class LegworthError(Exception):
    """Base of all errors raised on purpose; its text is one line that a user can act on."""

    exit_code: ClassVar[int] = 1
    http_status: ClassVar[int] = 500


class InputError(LegworthError):
    """The input is wrong.

    Parameters
    ----------
    faults
        Every fault found, in file and line order; never empty.
    """

    exit_code = 2
    http_status = 422

    def __init__(self, faults: Sequence[Fault]) -> None:
        self.faults = tuple(faults)
        super().__init__("\n".join(str(fault) for fault in self.faults))


class SettingError(LegworthError):
    """An option or a setting lies outside its limits."""

    exit_code = 2
    http_status = 422


class StoreError(SettingError):
    """The store of nights cannot be used as asked: no space, no such night, not a store."""

    http_status = 503


class StoreBusyError(StoreError):
    """Another process is putting a night into the store."""


class NightDamagedError(StoreError):
    """A night is missing, unreadable, or not what its manifest says."""


class SolveError(LegworthError):
    """No certified optimum was reached, so there is no bid price."""

    exit_code = 3
    http_status = 503


class SolverMissingError(SolveError):
    """The solver named is not installed or cannot be started."""


class SolverStoppedError(SolveError):
    """The solver ended without an optimum: time limit, infeasible, unbounded or crash."""


class NotCertifiedError(SolveError):
    """The solver claims an optimum that the certificate does not confirm."""


class NightStopped(LegworthError):
    """A check found tonight's prices too odd to go into force by themselves; the last night stays in force.

    Parameters
    ----------
    night
        Name of the night that was stopped.
    reasons
        One line a check that stopped it: what was found, the limit, and what to look at first.
    """

    exit_code = 4
    http_status = 409

    def __init__(self, night: str, reasons: Sequence[str]) -> None:
        self.night, self.reasons = night, tuple(reasons)
        super().__init__(
            "\n".join([f"night {night} is stopped and not published; the last one stays in force", *reasons])
        )
