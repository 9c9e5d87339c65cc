"""Errors of the control service; each has its HTTP status."""

from __future__ import annotations

from collections.abc import Sequence

from network.errors import LegworthError

__all__ = [
    "ForbiddenError",
    "KeyReusedError",
    "LedgerError",
    "MalformedError",
    "NoNightError",
    "RefusedError",
    "TokensDamagedError",
    "UnknownError",
    "UnknownLegError",
    "UnknownSaleError",
]


class MalformedError(LegworthError):
    """A request does not fit its description.

    Parameters
    ----------
    faults
        One line each.
    what
        What is wrong on the whole.
    """

    http_status = 422

    def __init__(self, faults: Sequence[str], what: str = "the request does not fit its description") -> None:
        self.faults = list(faults)
        super().__init__(f"{what}; correct the faults listed")


class KeyReusedError(LegworthError):
    """A caller's key was sent again with another order."""

    http_status = 409


class LedgerError(LegworthError):
    """The database did not take an order, as far as is known; sending it again under its key is safe."""

    http_status = 503


class NoNightError(LegworthError):
    """The store has no night in force, or the part asked for cannot be read."""

    http_status = 503


class TokensDamagedError(LegworthError):
    """The file of tokens cannot be read, so that nobody can be let in."""

    exit_code = 2
    http_status = 503


class UnknownError(LegworthError):
    """Something named in a request is not on sale, or not there."""

    http_status = 404


class ForbiddenError(LegworthError):
    """A token does not permit what was asked."""

    http_status = 403


class RefusedError(LegworthError):
    """A token is missing or unknown."""

    http_status = 401


class UnknownLegError(UnknownError):
    """A leg that the ledger does not know."""


class UnknownSaleError(UnknownError):
    """A cancellation of a sale that never was."""
