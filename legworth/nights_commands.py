"""The commands that look after a store of nights: list, show, compare, restore, thin, query, verify, hand-over."""

from __future__ import annotations

import sys
from contextlib import nullcontext
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from legworth.options import AS_JSON, EXIT_CODES, print_json

if TYPE_CHECKING:
    from datetime import datetime

    from legworth.store import Night, Store
    from network.store_settings import StoreSettings

__all__ = ["nights"]


@click.group(epilog=EXIT_CODES)
@click.option("--store", "path", type=click.Path(path_type=Path), help="Folder of the store, as refresh fills it.")
@click.pass_context
def nights(context: click.Context, path: Path | None) -> None:
    """Look after the nights in a store: which is in force, what they hold, how they differ."""
    context.obj = path


def _store(context: click.Context) -> Store:
    from legworth.store import Store

    if context.obj is None:
        raise click.UsageError("name the store: legworth nights --store DIR ...")
    return Store.open(context.obj)


def _in_force(store: Store) -> str | None:
    """Name of the night in force; a damaged one is remarked on and counts as none."""
    from legworth.store import NightDamagedError

    try:
        night = store.in_force()
    except NightDamagedError as error:
        click.echo(str(error), err=True)
        return None
    return None if night is None else night.name


def _chosen(store: Store, name: str | None) -> Night:
    """Return the night named, or the one in force."""
    from legworth.store.advice import no_night_in_force

    if name is not None:
        return store.night(name)
    night = store.in_force()
    if night is None:
        raise no_night_in_force(store)
    return night


@nights.command("list", epilog=EXIT_CODES)
@AS_JSON
@click.pass_context
def list_nights(context: click.Context, *, as_json: bool) -> None:
    """List the nights of the store, oldest first, and what was forced or stopped."""
    from legworth.store.listing import nights_as_json, print_nights
    from legworth.store.stopped import stopped_nights

    store = _store(context)
    found, in_force, stopped = store.nights(), _in_force(store), stopped_nights(store)
    if as_json:
        document = {"store": str(store.path), "in_force": in_force, "nights": nights_as_json(found, in_force)}
        print_json(document | {"stopped": [night.as_dict() for night in stopped]})
        return
    print_nights(found, in_force, stopped)


@nights.command(epilog=EXIT_CODES)
@click.argument("name", required=False)
@AS_JSON
@click.pass_context
def show(context: click.Context, name: str | None, *, as_json: bool) -> None:
    """Show one night, the one in force if NAME is left out: sizes, checks, seconds, and what became of it."""
    from legworth.store.report import night_as_json, print_night

    store = _store(context)
    night, in_force, history = _chosen(store, name), _in_force(store), store.history()
    if as_json:
        print_json(night_as_json(night, in_force, history))
        return
    print_night(night, in_force, history)


@nights.command(epilog=EXIT_CODES)
@click.argument("earlier")
@click.argument("later", required=False)
@click.option("--top", type=click.IntRange(1, 100_000), default=20, show_default=True, help="Greatest moves shown.")
@AS_JSON
@click.pass_context
def compare(context: click.Context, earlier: str, later: str | None, top: int, *, as_json: bool) -> None:
    """Compare night EARLIER with LATER, the one in force if left out: prices, legs, and revenue like for like."""
    from legworth.store.comparison import compare_nights
    from legworth.store.report import print_comparison

    store = _store(context)
    found = compare_nights(store.night(earlier), _chosen(store, later))
    if as_json:
        print_json(found.as_dict(top))
        return
    print_comparison(found, top)


@nights.command(epilog=EXIT_CODES)
@click.argument("name")
@click.option("--reason", required=True, help="Why; goes into the history with your user name.")
@AS_JSON
@click.pass_context
def restore(context: click.Context, name: str, reason: str, *, as_json: bool) -> None:
    """Put the earlier night NAME back in force, once every file of it has been verified."""
    from legworth.store.history import user_name

    night = _store(context).restore(name, user_name(), reason)
    if as_json:
        print_json({"in_force": night.name, "reason": reason})
        return
    click.echo(f"Night {night.name} is in force.")


@nights.command(epilog=EXIT_CODES)
@click.argument("folder", required=False, type=click.Path(path_type=Path))
@click.option("--newest", type=click.IntRange(1), help="Newest nights kept, in place of keep_newest of FOLDER.")
@click.option("--weeks", type=click.IntRange(0), help="Weeks of which a night is kept, in place of keep_weeks.")
@click.option("--months", type=click.IntRange(0), help="Months of which a night is kept, in place of keep_months.")
@click.option("--remove", is_flag=True, help="Remove the nights for good; without it they are only shown.")
@AS_JSON
@click.pass_context
def thin(
    context: click.Context,
    folder: Path | None,
    newest: int | None,
    weeks: int | None,
    months: int | None,
    *,
    remove: bool,
    as_json: bool,
) -> None:
    """Show which nights section [store] of FOLDER/network.toml keeps, and why; remove the others with --remove.

    The night in force, the one before it and the newest always stay. Every refresh thins by the same rule. Without
    FOLDER give all three numbers.
    """
    from legworth.store.thinning import freed_bytes
    from legworth.store.thinning_report import print_thinning, rule_words, thinning_as_json

    store, rule = _store(context), _rule(folder, newest, weeks, months)
    with store.lock() if remove else nullcontext():
        plan = store.thinning(rule)
        freed = freed_bytes(store.night(name).folder for name in plan.gone)
        if remove:
            store.thin(rule, f"by hand, keeping {rule_words(rule)}")
    if as_json:
        print_json(thinning_as_json(plan, rule, freed, remove))
        return
    print_thinning(plan, rule, freed, remove)


def _rule(folder: Path | None, newest: int | None, weeks: int | None, months: int | None) -> StoreSettings:
    """Read the rule of a network folder, with the numbers given in place of its own."""
    from network import Faults, InputError
    from network.settings import read_settings
    from network.store_settings import StoreSettings

    given = {"keep_newest": newest, "keep_weeks": weeks, "keep_months": months}
    numbers = {name: number for name, number in given.items() if number is not None}
    if folder is None:
        if len(numbers) < len(given):
            raise click.UsageError("name the network folder whose rule counts, or give --newest, --weeks and --months")
        return StoreSettings(**numbers)
    faults = Faults()
    settings = read_settings(folder, faults)
    if settings is None:
        raise InputError(faults.errors)
    return settings.store.model_copy(update=numbers)


@nights.command(epilog=EXIT_CODES)
@click.argument("sql")
@click.option(
    "--format",
    "form",
    type=click.Choice(["table", "csv", "json"]),
    default="table",
    show_default=True,
    help="How the answer is printed.",
)
@click.option("--rows", type=click.IntRange(1), default=50, show_default=True, help="Rows shown in a table.")
@AS_JSON
@click.pass_context
def query(context: click.Context, sql: str, form: str, rows: int, *, as_json: bool) -> None:
    """Answer one SELECT over all nights: a view per table, tonight_TABLE, nights and parts."""
    from legworth.store.report import print_rows, rows_as_json
    from legworth.store.sql import damage_met
    from legworth.store.sql import query as answered

    store = _store(context)
    known = store.nights()
    answer = answered(store, sql, known)
    for line in damage_met(known, sql):
        click.echo(f"{line}; look with `legworth nights verify`", err=True)
    if as_json or form == "json":
        print_json(rows_as_json(answer))
    elif form == "csv":
        click.echo(answer.to_pandas().to_csv(index=False, lineterminator="\n"), nl=False)
    else:
        print_rows(answer, rows)


@nights.command(epilog=EXIT_CODES)
@click.argument("name", required=False)
@AS_JSON
@click.pass_context
def verify(context: click.Context, name: str | None, *, as_json: bool) -> None:
    """Read every file of all nights, or of NAME, and say what is missing, added or changed.

    Without NAME it also says what is wrong with the night in force, or with the file that says which it is.
    """
    from legworth.progress import progress_bar
    from legworth.store.report import print_faults

    store = _store(context)
    chosen = store.nights() if name is None else (store.night(name),)
    faults: dict[str, tuple[str, ...]] = {}
    with progress_bar("Reading nights") as progress:
        for done, night in enumerate(chosen, start=1):
            faults[night.name] = night.verify()
            progress(done, len(chosen))
    in_force = _in_force_fault(store) if name is None else None
    sound = in_force is None and not any(faults.values())
    if as_json:
        lines = {key: list(lines) for key, lines in faults.items()}
        print_json({"ok": sound, "nights": lines, "in_force_fault": in_force})
    else:
        print_faults(faults)
        if in_force is not None:
            click.echo(in_force, err=True)
    if not sound:
        sys.exit(2)


def _in_force_fault(store: Store) -> str | None:
    """What is wrong with the night in force, or that none is though the store has some; None if all is well."""
    from legworth.store import NightDamagedError
    from legworth.store.advice import no_night_in_force

    try:
        missing = store.in_force() is None and bool(store.nights())
    except NightDamagedError as error:
        return str(error)
    return str(no_night_in_force(store)) if missing else None


@nights.command("hand-over", epilog=EXIT_CODES)
@click.option(
    "--to",
    "folder",
    required=True,
    type=click.Path(path_type=Path, file_okay=False),
    help="Folder that is new, empty, or holds an earlier hand-over, which is replaced.",
)
@click.option("--night", "name", help="Night to hand over; the one in force if left out.")
@click.option(
    "--format",
    "form",
    type=click.Choice(["both", "csv", "parquet"]),
    default="both",
    show_default=True,
    help="Format of the files.",
)
@click.option("--by-part", is_flag=True, help="Write one file per part of the night.")
@click.option(
    "--valid-from", metavar="INSTANT", help="ISO 8601 with offset; when the night was put in force, if left out."
)
@AS_JSON
@click.pass_context
def hand_over(
    context: click.Context,
    folder: Path,
    name: str | None,
    form: Any,
    valid_from: str | None,
    *,
    by_part: bool,
    as_json: bool,
) -> None:
    """Write bid prices and price curves of a night for an inventory system, with checksums written last."""
    from legworth.progress import progress_bar
    from legworth.store.hand_over import FORMATS, HandOverOptions
    from legworth.store.hand_over import hand_over as handed_over
    from network.counted import counted

    store = _store(context)
    night = _chosen(store, name)
    instant = _valid_from(store, night, valid_from)
    options = HandOverOptions(FORMATS if form == "both" else (form,), by_part)
    with progress_bar("Writing prices") as progress:
        rows = handed_over(night, folder, instant, options, progress)
    if as_json:
        print_json({"night": night.name, "valid_from": instant.isoformat(), "folder": str(folder), "rows": rows})
        return
    counts = f"bid prices of {counted(rows['bid_prices'], 'leg')}"
    if "price_curves" in rows:
        counts += f" and {counted(rows['price_curves'], 'row of price curves', 'rows of price curves')}"
    click.echo(f"Night {night.name}: {counts} written to {folder}, valid from {instant.isoformat(timespec='seconds')}")


def _valid_from(store: Store, night: Night, text: str | None) -> datetime:
    """Read the instant, or find when the night was last put in force."""
    from datetime import datetime

    from legworth.store import StoreError
    from legworth.store.history import IN_FORCE

    if text is None:
        known = [entry.at for entry in store.history() if entry.night == night.name and entry.event in IN_FORCE]
        instant = known[-1] if known else night.manifest.published
        if instant is None:
            raise StoreError(f"nobody knows when night {night.name} was put in force; give --valid-from")
        return instant
    try:
        instant = datetime.fromisoformat(text)
    except ValueError:
        raise StoreError(f"--valid-from {text!r} is no instant; write it as 2027-03-01T06:40+01:00") from None
    if instant.tzinfo is None:
        raise StoreError(f"--valid-from {text!r} has no offset from UTC; write it as 2027-03-01T06:40+01:00")
    return instant
