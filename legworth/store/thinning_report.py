"""What ``legworth nights thin`` prints, and the same as JSON."""

from __future__ import annotations

from typing import Any

from rich.table import Table

from legworth.report import console_for_output
from legworth.store.thinning import Thinning
from network.counted import counted
from network.store_settings import StoreSettings

__all__ = ["print_thinning", "rule_words", "thinning_as_json"]


def rule_words(rule: StoreSettings) -> str:
    """The rule in words."""
    return (
        f"the newest {rule.keep_newest:,}, and of those before them the first of each of the latest "
        f"{rule.keep_weeks:,} weeks and {rule.keep_months:,} months"
    )


def thinning_as_json(plan: Thinning, rule: StoreSettings, freed: int, done: bool) -> dict[str, Any]:
    """The rule, what it keeps and why, what it removes, and whether that was done."""
    return {
        "rule": rule.model_dump(),
        "kept": plan.kept,
        "removed" if done else "would_remove": list(plan.gone),
        "freed_bytes" if done else "would_free_bytes": freed,
    }


def print_thinning(plan: Thinning, rule: StoreSettings, freed: int, done: bool) -> None:
    """Print every night with what becomes of it and why, and how much room that makes."""
    console = console_for_output()
    table = Table(title="Nights", title_justify="left")
    table.add_column("Night", no_wrap=True)
    table.add_column("Stays")
    table.add_column("Why")
    names = sorted([*plan.kept, *plan.gone], key=lambda name: int(name.split("-", 1)[0]))
    for name in names:
        stays = name in plan.kept
        table.add_row(name, "yes" if stays else "no", plan.kept.get(name, ""))
    console.print(table, highlight=False)
    count = counted(len(plan.gone), "night")
    verdict = f"{count} removed, {freed / 1e6:,.1f} MB freed." if done else f"{count} would go, {freed / 1e6:,.1f} MB."
    console.print(f"Kept by the rule: {rule_words(rule)}.", highlight=False, soft_wrap=True)
    if plan.gone and not done:
        verdict += " Nothing has been removed; --remove does it, for good."
    console.print(verdict, highlight=False, soft_wrap=True)
