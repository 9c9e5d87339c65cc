"""Small hubs for the service's tests, and stores with a night of them. Everything is invented."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from legworth.refresh import RefreshOptions, refresh

__all__ = ["AS_OF", "HUB", "publish", "write_hub"]

HUB: dict[str, Any] = {"days": 2, "capacity": 20, "fares": {"Y": 400.0, "M": 250.0, "Q": 120.0}}
AS_OF = datetime(2027, 3, 1, 2, tzinfo=UTC)
SPOKES = 3


def write_hub(
    folder: Path,
    *,
    days: int = 1,
    capacity: int = 60,
    fares: dict[str, float] | None = None,
    mean: float = 5.0,
    as_of: datetime = AS_OF,
) -> list[tuple[str, ...]]:
    """Write days of three legs in and three out, the first ten days after the snapshot.

    Parameters
    ----------
    folder
        Made new.
    days, capacity
        Days of operation, and seats of every leg.
    fares
        Fare of each class on a single leg; a connection costs half as much again.
    mean
        Passengers that every product expects.
    as_of
        Snapshot.

    Returns
    -------
    list
        Legs of every itinerary; its name is theirs with hyphens between.
    """
    folder.mkdir(parents=True)
    legs, paths = ["leg,origin,destination,departs,arrives,capacity,sold"], []
    for day in range(days):
        morning = (AS_OF + timedelta(days=10 + day)).replace(hour=8)
        mark = "" if day == 0 else f".{day}"
        for number in range(SPOKES):
            for name, ends, start in (
                (f"IN{number}{mark}", f"S{number},HUB", 0),
                (f"OUT{number}{mark}", f"HUB,S{number}", 3),
            ):
                times = [(morning + timedelta(hours=start + plus)).isoformat() for plus in (0, 1)]
                legs.append(f"{name},{ends},{times[0]},{times[1]},{capacity},0")
                paths.append((name,))
        paths += [(f"IN{a}{mark}", f"OUT{b}{mark}") for a in range(SPOKES) for b in range(SPOKES) if a != b]
    stations = ["station,name,latitude,longitude,minimum_connection", "HUB,Hub,50,8,30"]
    stations += [f"S{number},Spoke {number},{48 + number},{4 + number},30" for number in range(SPOKES)]
    classes = fares or {"A": 900.0}
    names = ["-".join(path) for path in paths]
    sold = [
        (name, which, fare if len(path) == 1 else 1.5 * fare)
        for name, path in zip(names, paths, strict=True)
        for which, fare in classes.items()
    ]
    tables = {
        "stations": stations,
        "legs": legs,
        "itineraries": ["itinerary,legs", *(f"{n},{' '.join(p)}" for n, p in zip(names, paths, strict=True))],
        "fares": ["itinerary,fare_class,fare", *(f"{name},{which},{fare}" for name, which, fare in sold)],
        "demand": ["itinerary,fare_class,mean,deviation", *(f"{n},{c},{mean},{mean**0.5}" for n, c, _ in sold)],
    }
    for name, rows in tables.items():
        (folder / f"{name}.csv").write_text("\n".join(rows) + "\n", encoding="utf-8")
    order = ", ".join(f'"{name}"' for name in classes)
    head = f'name = "Small hub"\ncurrency = "EUR"\nas_of = "{as_of.isoformat()}"\nfare_classes = [{order}]\n'
    (folder / "network.toml").write_text(head, encoding="utf-8")
    return paths


def publish(folder: Path, store: Path, **hub: Any) -> list[tuple[str, ...]]:
    """Write a hub, and publish a night of it, whatever the checks against the night before say."""
    paths = write_hub(folder, **hub)
    refresh(folder, store, RefreshOptions(force="a test wants another night"))
    return paths
