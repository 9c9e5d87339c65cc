"""Two nights of a synthetic year: seconds, core seconds and peak memory of `legworth refresh`, parent and workers.

``python -m benchmarks.refresh_year --dir DIR --days 365 --jobs 2 --changed 0.05`` writes a first night and the next one
(`benchmarks.synthetic_year`), unless DIR holds them already, and refreshes one after the other into a new store. Memory
is that of the whole family of processes, solvers included, looked at five times a second: shared pages count once
(proportional set size, Linux only). It prints a Markdown table.
"""

from __future__ import annotations

import json
import resource
import shutil
import subprocess
import sys
import threading
import time
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import click

from benchmarks.synthetic_year import write_next_night, write_year

LOOK = 0.2
"""Seconds between two looks at memory."""


@dataclass
class FamilyMemory:
    """Watches the memory of a process and its descendants.

    Attributes
    ----------
    peak, parent
        Most memory of all together, and of the process alone, bytes.
    """

    process: int
    peak: int = 0
    parent: int = 0
    _ended: threading.Event = field(default_factory=threading.Event)

    def watch(self) -> None:
        """Look again and again until told to end."""
        while not self._ended.wait(LOOK):
            sizes = {process: _proportional(process) for process in _family(self.process)}
            self.peak = max(self.peak, sum(sizes.values()))
            self.parent = max(self.parent, sizes.get(self.process, 0))

    def end(self) -> None:
        """Stop looking."""
        self._ended.set()


def _family(process: int) -> list[int]:
    """Return a process and all its descendants."""
    children: dict[int, list[int]] = {}
    for stat in Path("/proc").glob("[0-9]*/stat"):
        try:
            text = stat.read_text()
        except OSError:  # it has ended meanwhile
            continue
        children.setdefault(int(text.rpartition(")")[2].split()[1]), []).append(int(stat.parent.name))
    found, todo = [], [process]
    while todo:
        found.append(one := todo.pop())
        todo += children.get(one, [])
    return found


def _proportional(process: int) -> int:
    """Memory of a process in bytes, shared pages counted in parts."""
    try:
        text = Path(f"/proc/{process}/smaps_rollup").read_text()
    except OSError:
        return 0
    line = next((line for line in text.splitlines() if line.startswith("Pss:")), "Pss: 0 kB")
    return 1024 * int(line.split()[1])


def _core_seconds() -> float:
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


def run_night(folder: Path, store: Path, jobs: int, force: str | None = None) -> dict[str, Any]:
    """Refresh one night and say what it took."""
    command = [sys.executable, "-m", "legworth.cli", "refresh", str(folder), "--store", str(store), "--json"]
    command += ["--jobs", str(jobs)] + ([] if force is None else ["--force", force])
    cores, clock = _core_seconds(), time.perf_counter()
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as process:
        memory = FamilyMemory(process.pid)
        watcher = threading.Thread(target=memory.watch)
        watcher.start()
        out, _ = process.communicate()
        memory.end()
        watcher.join()
    if process.returncode:
        raise SystemExit(f"refresh ended with exit code {process.returncode}")
    return {
        "seconds": time.perf_counter() - clock,
        "core seconds": _core_seconds() - cores,
        "peak memory, GiB": memory.peak / 2**30,
        "of it the parent at its peak, GiB": memory.parent / 2**30,
        "summary": json.loads(out),
    }


@click.command()
@click.option(
    "--dir", "folder", type=click.Path(path_type=Path), required=True, help="Where the nights and the store go."
)
@click.option("--days", type=click.IntRange(2), default=365, show_default=True)
@click.option("--jobs", type=click.IntRange(1), default=2, show_default=True)
@click.option("--changed", type=click.FloatRange(0, 1), default=0.05, show_default=True, help="Share of days changed.")
@click.option("--force", help="Reason to publish although a check fails.")
def main(folder: Path, days: int, jobs: int, changed: float, force: str | None) -> None:
    """Time two nights of a synthetic year."""
    first, second, store = folder / f"first_{days}", folder / f"second_{days}", folder / f"store_{days}"
    if not first.exists():
        write_year(first, days)
    if not second.exists():
        write_next_night(second, first, changed)
    shutil.rmtree(store, ignore_errors=True)
    nights = [run_night(night, store, jobs, force) for night in (first, second)]
    click.echo(f"\n{days} days, {jobs} workers\n\n| | first night | second night |\n|---|---|---|")
    for name in nights[0]:
        if name != "summary":
            click.echo(f"| {name} | {' | '.join(f'{night[name]:.2f}' for night in nights)} |")
    phases = [night["summary"].get("seconds", {}) for night in nights]
    for phase in phases[0]:
        click.echo(f"| {phase}, s | {' | '.join(f'{one.get(phase, 0):.2f}' for one in phases)} |")


if __name__ == "__main__":
    main()
