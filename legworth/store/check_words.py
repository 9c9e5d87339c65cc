"""The checks of a night in words: what each looks at, and its figures with their unit."""

from __future__ import annotations

from legworth.store.manifest import Check

__all__ = ["CERTIFICATES", "TITLES", "check_line", "check_title", "figure_text", "finding", "outcome_word"]

CERTIFICATES = "certificates"
TITLES = {
    CERTIFICATES: ("parts without a certified optimum", ""),
    "snapshot": ("snapshot older than last night's", "h"),
    "no_demand": ("legs without demand to come", "%"),
    "demand_total": ("move of all demand to come", "%"),
    "demand_legs": ("legs whose demand moved far", "%"),
    "capacity_total": ("move of all seats authorised", "%"),
    "capacity_legs": ("legs whose seats moved far", "%"),
    "prices": ("legs whose bid price moved far", "%"),
    "above_fare": ("legs with a bid price above every fare", "%"),
    "zero": ("legs with seats whose bid price is zero", "%"),
    "missing": ("departures of last night missing tonight", "%"),
}
"""What each check looks at, in words, and the unit of its figures."""


def check_title(check: Check) -> str:
    """What a check looks at; its name if it is none of those above."""
    return TITLES.get(check.name, (check.name, ""))[0]


def figure_text(check: Check, value: float | None) -> str:
    """A figure of a check with its unit; empty if there is none."""
    unit = TITLES.get(check.name, ("", ""))[1]
    if value is None:
        return ""
    return f"{100 * value:,.3g} %" if unit == "%" else f"{value:,.4g} {unit}".rstrip()


def outcome_word(check: Check) -> str:
    """Whether a check held; one without last night to compare with was not made."""
    if check.passed:
        return "held" if check.found is not None else "not compared"
    return "FAILED"


def check_line(check: Check) -> str:
    """One line for people: what was found, the limit, and what to look at first."""
    look = f"; look first at {'; '.join(check.look_at)}" if check.look_at and not check.passed else ""
    return f"{finding(check)}{look}"


def finding(check: Check) -> str:
    """What was found, and the limit."""
    title = check_title(check)
    if check.found is None:
        return f"{title}: not compared, there is no last night"
    found, limit = (figure_text(check, figure) for figure in (check.found, check.limit or 0.0))
    return f"{title}: {found}, at most {limit} allowed"
