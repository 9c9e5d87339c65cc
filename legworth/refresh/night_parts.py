"""The parts of a night: given to workers, and stored as they come back."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from contextlib import closing, contextmanager

from legworth.refresh.cluster import Cluster
from legworth.refresh.last_night import LastNight
from legworth.refresh.part_exchange import PartInput, PartOutput
from legworth.refresh.parts import Part
from legworth.refresh.processes import Processes
from legworth.refresh.running import Failure, Workers, run_parts
from legworth.refresh.work import Work
from legworth.store import PartEntry
from legworth.store.disk import one_line_errors
from network import Network

__all__ = ["price_parts"]


def price_parts(work: Work, network: Network, parts: list[Part], last: LastNight | None) -> list[PartEntry]:
    """Price every part and write its files aside."""
    options, by_name = work.options, {part.name: part for part in parts}
    if len(by_name) != len(parts):
        raise AssertionError("two parts of one name")

    def inputs() -> Iterator[PartInput]:
        for part in parts:
            own = part.network_of(network)
            yield PartInput(
                name=part.name,
                network=own,
                components=part.components,
                options=options.pricing,
                demand_family=work.settings.defaults.demand_family,
                start=None if last is None else last.start(own),
                last=None if last is None else last.part(part.name),
            )

    def failed(failure: Failure) -> None:
        then = f"it is tried once more, by {failure.solver}" if failure.again else "the night stops"
        work.journal.warn("part_failed", f"part {failure.part}: {failure.problem}; {then}", part=failure.part)

    done, entries = 0, {}
    seconds = work.settings.refresh.part_seconds
    with _workers(work) as workers, closing(run_parts(inputs(), workers, work.task, seconds, failed)) as outputs:
        for output in outputs:
            entry = _store(work, output, by_name[output.name], last)
            entries[output.name] = entry
            done += entry.products
            work.progress(done, network.n_products)
    return [entries[part.name] for part in parts]


@contextmanager
def _workers(work: Work) -> Iterator[Workers]:
    """Whoever works; what solvers of this machine leave when they are killed goes with what the night has aside."""
    if work.workers is not None or work.options.cluster is not None:
        yield work.workers or Cluster(work.options.cluster or "")
        return
    scratch = work.aside.folder.with_name(f"{work.aside.name}.solvers").resolve()
    with one_line_errors(scratch, "write"):
        scratch.mkdir()
    try:
        yield Processes(work.options.pricing.jobs, scratch)
    finally:
        shutil.rmtree(scratch, ignore_errors=True)


def _store(work: Work, output: PartOutput, part: Part, last: LastNight | None) -> PartEntry:
    """Write the files of a part, or take them over."""
    for name, data in output.written.items():
        work.aside.write(f"part={part.name}/{name}", data)
    for name in output.taken:
        assert last is not None
        work.aside.take_over(f"part={part.name}/{name}", last.night)
    entry = PartEntry(
        name=part.name,
        legs=len(part.legs),
        itineraries=len(part.itineraries),
        products=part.products,
        objective=output.summary["objective"],
        certificate={name: found.as_dict() for name, found in output.certificates.items()},
        fingerprints=output.fingerprints.as_dict(),
        taken_over_from=None if output.solved or last is None else last.night.name,
        seconds={phase: round(spent, 4) for phase, spent in output.seconds.items()},
    )
    work.journal.note(
        "part",
        part=part.name,
        solved=output.solved,
        solver=output.summary["solver"],
        certified=output.summary["certified"],
        products=part.products,
        seconds=entry.seconds,
    )
    return entry
