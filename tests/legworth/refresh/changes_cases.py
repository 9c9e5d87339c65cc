"""Published nights of small networks, made of parts by hand so that these tests need no whole refresh."""

from __future__ import annotations

import json
import os
import time
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from legworth.pricing import PricingOptions
from legworth.refresh.changes_causes import Cause, PartQuestion, explain_part
from legworth.refresh.parts import cut_parts
from legworth.refresh.tasks import KEPT_TABLES, LastPart, PartInput, PartOutput, run_part
from legworth.store import Check, Forced, Manifest, Night, PartEntry, Store
from lp import LpOptions
from network import Network, read_folder
from tests.folders import Folder

__all__ = ["Extras", "NeverAnswers", "hub_folder", "publish", "publish_folder"]

CAPACITY = 40


@dataclass(frozen=True)
class Extras:
    """What a manifest says beside the parts."""

    checks: tuple[Check, ...] = ()
    forced: Forced | None = None
    settings: dict[str, Any] | None = None


def publish_folder(
    store: Store, folder: Folder, place: Path, extras: Extras | None = None, lp: LpOptions | None = None
) -> Night:
    """Write a folder, price it and publish it as the next night."""
    place = place / f"input-{len(store.nights())}"
    return publish(store, read_folder(folder.write(place)).network, extras, lp)


def publish(store: Store, network: Network, extras: Extras | None = None, lp: LpOptions | None = None) -> Night:
    """Price a network, every component a part, and publish it; parts that did not change are taken over."""
    extras = extras or Extras()
    last = store.in_force()
    options = PricingOptions(lp=lp or LpOptions())
    entries = []
    with store.begin(network.as_of) as aside:
        for part in cut_parts(network, large=1, bundle_most=1):
            kept = _last_part(last, part.name)
            found = run_part(PartInput(part.name, part.network_of(network), part.components, options, last=kept))
            for name, data in found.written.items():
                aside.write(f"part={part.name}/{name}", data)
            for name in found.taken:
                assert last is not None
                aside.take_over(f"part={part.name}/{name}", last)
            entries.append(_entry(found, None if found.solved or last is None else last.name))
        manifest = Manifest(
            night=aside.name,
            number=aside.number,
            as_of=network.as_of,
            before=last.name if last else None,
            settings=extras.settings or {"method": str(options.lp.method)},
            checks=extras.checks,
            forced=extras.forced,
            parts=tuple(entries),
            seconds={"read": 0.5, "parts": 2.0},
        )
        return aside.publish(manifest)


def _entry(found: PartOutput, taken_over_from: str | None) -> PartEntry:
    sizes = found.summary["sizes"]
    return PartEntry(
        name=found.name,
        legs=sizes["legs"],
        itineraries=sizes["itineraries"],
        products=sizes["products"],
        objective=found.summary["objective"],
        certificate={name: proof.as_dict() for name, proof in found.certificates.items()},
        fingerprints=found.fingerprints.as_dict(),
        taken_over_from=taken_over_from,
        seconds=found.seconds,
    )


def _last_part(last: Night | None, part: str) -> LastPart | None:
    if last is None or part not in last.manifest.part:
        return None
    folder = last.folder / f"part={part}"
    return LastPart(
        last.manifest.part[part].fingerprints,
        json.loads((folder / "summary.json").read_text()),
        {name: (folder / f"{name}.parquet").read_bytes() for name in KEPT_TABLES},
        frozenset(path.name for path in folder.iterdir()),
    )


@dataclass(frozen=True)
class NeverAnswers:
    """Looks for causes, but for one part: there its process hangs or dies."""

    part: str
    dies: bool

    def __call__(self, question: PartQuestion, options: LpOptions) -> list[Cause]:
        if question.tonight.name == f"part={self.part}":
            if self.dies:
                os._exit(9)
            time.sleep(3600)
        return explain_part(question, options)


def hub_folder() -> Folder:
    """A hub day that is tight on every leg, and a quieter day after it that nothing ties to the first."""
    legs, itineraries, fares, demand = [], [], [], []
    for day in (1, 2):
        ends = {"in": ("NOR", "HUB", 6), "back": ("OST", "HUB", 6), "out": ("HUB", "SUD", 9), "far": ("HUB", "OST", 9)}
        for name, (origin, destination, hour) in ends.items():
            times = [f"2030-03-0{day}T{clock}+01:00" for clock in (f"{hour:02}:00", f"{hour + 1:02}:30")]
            legs.append(",".join([f"{name}{day}", origin, destination, *times, f"{CAPACITY},20"]))
        paths = [("in",), ("back",), ("out",), ("far",), ("in", "out"), ("in", "far"), ("back", "out")]
        for n, path in enumerate(paths):
            itinerary = f"{'+'.join(path)}-{day}"
            itineraries.append(f"{itinerary},{' '.join(f'{leg}{day}' for leg in path)}")
            for k, fare_class in enumerate("ABC"):
                fare = (200 + 17 * n + (90 if len(path) > 1 else 0)) * (1, 0.6, 0.35)[k]
                fares.append(f"{itinerary},{fare_class},{fare:.2f}")
                demand.append(f"{itinerary},{fare_class},{(3.5, 4.5, 6)[k] / day:.2f},{(2.4, 2.6, 3)[k]:.2f}")
    folder = Folder().drop("booking_curves.csv")
    tables = {
        "legs": ("leg,origin,destination,departs,arrives,capacity,sold", legs),
        "itineraries": ("itinerary,legs", itineraries),
        "fares": ("itinerary,fare_class,fare", fares),
        "demand": ("itinerary,fare_class,mean,deviation", demand),
    }
    for name, (header, rows) in tables.items():
        folder.put(f"{name}.csv", "\n".join([header, *rows]) + "\n")
    return folder
