"""A night as a recipe: read, cut, price every part, check against last night, publish all or nothing."""

from __future__ import annotations

import shutil
import time
import traceback
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from legworth.pricing import PricingOptions
from legworth.refresh.fingerprints import code_fingerprint, pricing_settings, program_versions
from legworth.refresh.inputs import Snapshot, take_snapshot
from legworth.refresh.journal import Journal
from legworth.refresh.last_night import LastNight, sound_night
from legworth.refresh.night_parts import price_parts
from legworth.refresh.night_verdict import judge, report_changes
from legworth.refresh.parts import cut_parts
from legworth.refresh.running import PartTask, Workers
from legworth.refresh.tasks import run_part
from legworth.refresh.work import Progress, RefreshOptions, Work
from legworth.store import Manifest, Night, Store, StoreError
from lp import Method
from network import Faults, LegworthError, Network, SettingError, read_folder
from network.errors import NightStopped
from network.settings import NetworkSettings, read_settings

__all__ = ["RefreshOptions", "Refreshed", "refresh"]


@dataclass(frozen=True)
class Refreshed:
    """A night that was published.

    Attributes
    ----------
    night
        The night, now in force.
    network, currency
        Name of what was priced, and its currency.
    removed
        Earlier nights that the rule of the store no longer keeps.
    """

    night: Night
    network: str
    currency: str
    removed: tuple[str, ...]


def refresh(
    folder: Path,
    store_path: Path,
    options: RefreshOptions | None = None,
    *,
    progress: Progress | None = None,
    workers: Workers | None = None,
    task: PartTask = run_part,
) -> Refreshed:
    """Price a network folder and put the night in force.

    Parameters
    ----------
    folder
        The network folder.
    store_path
        The store of nights; made if it is not there.
    options
        How.
    progress
        Called with the products priced so far and the products in all.
    workers, task
        Who works on the parts, and the work on one of them; the options say who if they do not.

    Raises
    ------
    InputError
        If the tables are at fault.
    SettingError
        If the store, a setting or the cluster is; or if the tables change while they are read.
    SolveError
        If a part has no certified optimum.
    NightStopped
        If a check stops the night. Whatever is raised, the night in force stays what it was.
    """
    options = options or RefreshOptions()
    settings = _settings(folder)
    store = Store.open(store_path, create=True)
    with store.begin(settings.as_of) as aside:
        journal = Journal(aside.log)
        try:
            work = Work(store, aside, options, journal, settings, workers, task, progress or (lambda done, total: None))
            journal.note("begun", f"night {aside.name} begins", night=aside.name, as_of=settings.as_of)
            night, network = _make(work, folder)
        except NightStopped as stopped:
            journal.fail("stopped", reasons=stopped.reasons)
            raise
        except LegworthError as error:
            journal.fail("failed", error=str(error).splitlines())
            raise
        except BaseException as error:
            journal.fail("failed", error=[repr(error)], trace=traceback.format_exc().splitlines())
            raise
        finally:
            journal.close()
    return Refreshed(night, network.name, network.currency, _thinned(store, settings, aside.log))


def _settings(folder: Path) -> NetworkSettings:
    settings = read_settings(folder, Faults()) if folder.is_dir() else None
    if settings is None:
        read_folder(folder)  # tells every fault
        raise SettingError(f"{folder}: network.toml was being written; refresh again")
    return settings


def _make(work: Work, folder: Path) -> tuple[Night, Network]:
    """Read, price, check and publish."""
    with work.phase("read"):
        snapshot, network = _read(work, folder)
    with work.phase("last_night"):
        found = sound_night(work.store, lambda line: work.journal.warn("night_damaged", line))
        last = None if found is None else LastNight(found)
        work.journal.note(
            "last_night", f"compared with {found.name if found else 'no earlier night'}", last=found and found.name
        )
    if last is not None:
        _check_same_network(work.store, last.night.manifest, network)
    with work.phase("cut"):
        parts = cut_parts(network)
    with work.phase("parts"):
        entries = price_parts(work, network, parts, last)
    with work.phase("checks"):
        checks, forced = judge(work, entries, None if last is None else last.night)
    manifest = Manifest(
        night=work.aside.name,
        number=work.aside.number,
        network=network.name,
        currency=network.currency,
        as_of=network.as_of,
        before=None if last is None else last.night.name,
        inputs=snapshot.files,
        settings=_decided(work.options.pricing),
        versions={**program_versions(), "code": code_fingerprint()},
        seed=work.options.pricing.lp.seed if work.options.pricing.lp.method is Method.RANDOMISED else None,
        checks=tuple(checks),
        forced=forced,
        parts=tuple(entries),
        seconds=work.seconds,
    )
    with work.phase("changes"):
        report_changes(work, manifest, None if last is None else last.night)
    begin = time.perf_counter()
    night = work.aside.publish(manifest.model_copy(update={"seconds": work.seconds}))
    work.journal.note("published", seconds=work.seconds | {"publish": time.perf_counter() - begin})
    return night, network


def _check_same_network(store: Store, last: Manifest, network: Network) -> None:
    """Nights of a store are compared with each other, so they are of one network in one currency."""
    if (last.network or network.name, last.currency or network.currency) != (network.name, network.currency):
        raise SettingError(
            f"{store.path} holds nights of {last.network!r} in {last.currency}, and this folder is {network.name!r} in "
            f"{network.currency}; name a store of its own for it (--store)"
        )


def _read(work: Work, folder: Path) -> tuple[Snapshot, Network]:
    """Read a private copy of the tables, and remove it."""
    copy = work.aside.folder.with_name(f"{work.aside.name}.inputs")
    try:
        snapshot = take_snapshot(folder, copy, lambda why: work.journal.warn("inputs_moved", f"{why}; reading again"))
        read = read_folder(snapshot.folder)
        settings = read_settings(snapshot.folder, Faults())
    finally:
        shutil.rmtree(copy, ignore_errors=True)
    if settings is None or settings.as_of != work.settings.as_of:
        raise SettingError("network.toml: was replaced by one of another snapshot while the night began; refresh again")
    work.settings = settings
    network = read.network
    work.journal.note(
        "read",
        f"{network.name}: {network.n_legs:,} legs and {network.n_products:,} products",
        inputs={name: entry.sha256 for name, entry in snapshot.files.items()},
        warnings=[str(warning) for warning in read.warnings],
    )
    return snapshot, network


def _decided(pricing: PricingOptions) -> dict[str, Any]:
    curves = None if pricing.curves is None else str(pricing.curves)
    return {**pricing_settings(pricing), "price_curves": curves}


def _thinned(store: Store, settings: NetworkSettings, log: Path) -> tuple[str, ...]:
    """Remove the nights that the rule does not keep; a store that is busy again is thinned the next time."""
    try:
        with closing(Journal(log)) as journal:
            try:
                removed = store.thin(settings.store)
            except StoreError as error:
                journal.warn("not_thinned", f"earlier nights are left for now: {error}")
                return ()
            if removed:
                journal.note("thinned", f"{len(removed)} earlier nights removed", nights=removed)
            return removed
    except StoreError:  # no log: tonight is in force whatever becomes of the earlier ones
        return ()
