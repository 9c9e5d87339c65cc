"""The nightly command: refresh."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from legworth.options import AS_JSON, EXIT_CODES, FOLDER, pricing_from, pricing_options, print_json

if TYPE_CHECKING:
    from legworth.refresh import Refreshed

__all__ = ["refresh"]


@click.command(epilog=EXIT_CODES)
@FOLDER
@click.option(
    "--store",
    "store",
    type=click.Path(path_type=Path, file_okay=False),
    help="Store of nights; made if it is not there. Without it, FOLDER with _nights behind its name.",
)
@click.option(
    "--cluster", metavar="ADDRESS", help="Dask scheduler whose workers price the parts, or its scheduler file."
)
@click.option(
    "--force", metavar="REASON", help="Publish even if a check fails, and keep the reason; never without certificate."
)
@click.option(
    "--curves",
    type=click.Choice(["none", "decomposition", "fare-splits"]),
    default="decomposition",
    show_default=True,
    help="Price curves: displaced by the deterministic program's prices, or by fare splits (slower).",
)
@pricing_options
@AS_JSON
def refresh(
    folder: Path, store: Path | None, cluster: str | None, force: str | None, *, as_json: bool, **how: Any
) -> None:
    """Price every departure of FOLDER, check the night against the last one, and put it in force.

    Nothing is published unless every part has a certified optimum and every check of section [refresh] of network.toml
    passes; until then, and if anything fails, the last night stays in force. Parts that nothing has changed in are
    taken over and certified again.
    """
    from legworth.progress import progress_bar
    from legworth.refresh import RefreshOptions
    from legworth.refresh import refresh as refreshed

    options = RefreshOptions(pricing_from(how), cluster, force)
    place = store if store is not None else _beside(folder)
    with progress_bar("Pricing products") as progress:
        found = refreshed(folder, place, options, progress=progress)
    if as_json:
        print_json(_as_json(found, place))
        return
    _print(found)


def _beside(folder: Path) -> Path:
    whole = folder.resolve()
    return (folder if folder.name else whole).with_name(f"{whole.name}_nights")


def _as_json(found: Refreshed, place: Path) -> dict[str, Any]:
    manifest = found.night.manifest
    document = manifest.model_dump(mode="json", exclude={"files", "parts", "columns"})
    return {
        "ok": True,
        "store": str(place),
        "folder": str(found.night.folder),
        "network": found.network,
        "currency": found.currency,
        **document,
        **_counts(found),
        "thinned": list(found.removed),
    }


def _counts(found: Refreshed) -> dict[str, Any]:
    parts = found.night.manifest.parts
    return {
        "parts": len(parts),
        "taken_over": sum(part.taken_over_from is not None for part in parts),
        "legs": sum(part.legs for part in parts),
        "itineraries": sum(part.itineraries for part in parts),
        "products": sum(part.products for part in parts),
        "objective": sum(part.objective or 0.0 for part in parts),
    }


def _print(found: Refreshed) -> None:
    from rich.table import Table

    from legworth.report import CAUTION, console_for_output, money
    from legworth.store.check_words import check_title

    manifest, counts = found.night.manifest, _counts(found)
    console = console_for_output()
    console.print(f"{found.network}: night {found.night.name} is in force", markup=False, highlight=False)
    table = Table(show_header=False, box=None, pad_edge=False)
    solved = counts["parts"] - counts["taken_over"]
    table.add_row(
        "parts", f"{counts['parts']:,}, {solved:,} solved and {counts['taken_over']:,} taken over, all certified"
    )
    table.add_row("legs, products", f"{counts['legs']:,}, {counts['products']:,}")
    table.add_row("revenue to come by the program", f"{money(counts['objective'])} {found.currency}")
    table.add_row("compared with", manifest.before or "no earlier night")
    passed = [check for check in manifest.checks if check.passed and check.found is not None]
    failed = [check_title(check) for check in manifest.checks if not check.passed]
    table.add_row("checks", f"{len(passed)} passed" + (f", forced in spite of: {'; '.join(failed)}" if failed else ""))
    if manifest.forced is not None:
        table.add_row("forced by", f"{manifest.forced.who}: {manifest.forced.reason}")
    table.add_row("seconds", ", ".join(f"{name} {spent:.1f}" for name, spent in manifest.seconds.items()))
    page = found.night.folder / "changes.html"
    console.print(table)
    # Not in the table, which would cut a path short or break it.
    moved = str(page) if page.exists() else "not reported; the log says why"
    console.print(f"what moved: {moved}", markup=False, highlight=False, soft_wrap=True)
    console.print(CAUTION, markup=False, highlight=False, soft_wrap=True)
