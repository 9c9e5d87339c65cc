"""Errors of the control service; each has its HTTP status."""

from __future__ import annotations

from network.errors import LegworthError

__all__ = ["KeyReusedError", "LedgerError", "UnknownLegError", "UnknownSaleError"]


class KeyReusedError(LegworthError):
    """A caller's key was sent again with another order."""

    http_status = 409


class UnknownLegError(LegworthError):
    """A leg that the ledger does not know."""

    http_status = 404


class UnknownSaleError(LegworthError):
    """A cancellation of a sale that never was."""

    http_status = 404


class LedgerError(LegworthError):
    """The database did not take an order, as far as is known; sending it again under its key is safe."""

    http_status = 503
