"""Disturbs `legworth refresh` in every way that a night meets, and looks at what is in force afterwards.

``python -m benchmarks.refresh_faults [--kills 200] [--only NAME ...] [--seed N] [--side-by-side N] [--json]``

Every try begins with a store of two nights and tables that have changed since, starts the real command with two
workers, and disturbs it. After every try the night in force must be the old one or the new one in full: every file by
its hash, every certificate, and byte for byte what an undisturbed night of the same tables gives. The next night must
succeed, be as expected, and leave nothing behind; no process may be left; and a reader beside it must never have seen
anything else. Each violation is listed; the exit code is 1 if there is any. Needs Linux; what needs root is left out
with a line that says so where it is missing.
"""

from __future__ import annotations

import hashlib
import json
import signal
import sys
import tempfile
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import click

from benchmarks.faults.campaign import Campaign, Fault, Skip, undisturbed
from benchmarks.faults.damage import DAMAGE
from benchmarks.faults.disks import DISKS
from benchmarks.faults.ground import ROOT, Ground, check_states
from benchmarks.faults.kills import KILLS
from benchmarks.faults.moving import MOVING
from benchmarks.faults.solvers import SOLVERS
from benchmarks.faults.watching import kill_family

__all__ = ["FAULTS", "run_campaign"]

FAULTS: dict[str, Fault] = {**KILLS, **DISKS, **MOVING, **SOLVERS, **DAMAGE}


def run_campaign(campaign: Campaign, names: list[str], kills: int, side_by_side: int, *, told: bool) -> dict[str, str]:
    """Make all tries; return why tries were left out, by try."""
    skipped: dict[str, str] = {}

    def one(name: str, number: int, of: int) -> None:
        try:
            FAULTS[name].run(campaign, number, of, campaign.random(name, number))
        except Skip as why:
            skipped[f"{name} {number}"] = str(why)
        except Exception as error:  # a try that cannot be made proves nothing, and must not hide the others
            campaign.tally(name).violations.append(f"{name} {number}: the try itself failed: {error!r}")
        if told:
            tally = campaign.tallies.get(name)
            click.echo(f"{time.strftime('%H:%M:%S')} {name} {number} of {of}", err=True)
            for line in tally.violations if tally else ():
                if line.startswith(f"{name} {number}"):
                    click.echo(f"  {line}", err=True)

    check_states(campaign.ground, campaign.scratch / "states")
    undisturbed(campaign)
    pool = ThreadPoolExecutor(side_by_side)
    try:
        tries = [(name, max(FAULTS[name].tries(kills), 1)) for name in names]
        for future in [pool.submit(one, name, n, of) for name, of in tries for n in range(1, of + 1)]:
            future.result()
    finally:
        pool.shutdown(wait=False, cancel_futures=True)
        kill_family(campaign.ground.mark)
        pool.shutdown()
    return skipped


def _sources() -> str:
    """Hash of all sources: a campaign on a program that changes meanwhile proves nothing."""
    digest = hashlib.sha256()
    for room in ("network", "lp", "heuristics", "legworth"):
        for path in sorted((ROOT / room).rglob("*")):
            if path.suffix in (".py", ".json", ".html"):
                digest.update(f"{path}".encode() + path.read_bytes())
    return digest.hexdigest()


@click.command()
@click.option("--kills", default=200, show_default=True, help="Tries of the first fault; the others have a share.")
@click.option("--only", multiple=True, type=click.Choice(list(FAULTS)), help="Only this fault; may be repeated.")
@click.option("--seed", default=1, show_default=True, help="Seed of the random generator.")
@click.option("--side-by-side", default=1, show_default=True, help="Tries made at the same time.")
@click.option("--scratch", type=click.Path(path_type=Path), help="Where to work; a temporary folder if not given.")
@click.option("--told", is_flag=True, help="Tell every try and violation as it comes.")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON document.")
def main(
    kills: int, only: tuple[str, ...], seed: int, side_by_side: int, scratch: Path | None, *, told: bool, as_json: bool
) -> None:
    """Run the campaign."""
    if not sys.platform.startswith("linux"):
        raise click.ClickException("the campaign finds processes by /proc and needs Linux")
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
    begun, sources = time.monotonic(), _sources()
    names = [name for name in FAULTS if not only or name in only]
    with tempfile.TemporaryDirectory(dir=scratch) as place:
        Path(place).chmod(0o755)
        campaign = Campaign(Ground(Path(place)), Path(place), seed)
        skipped = run_campaign(campaign, names, kills, side_by_side, told=told)
    seconds = time.monotonic() - begun
    violations = [line for tally in campaign.tallies.values() for line in tally.violations]
    if _sources() != sources:
        violations.append("the sources changed while the campaign ran: run it again")
    if as_json:
        tallies = {name: tally.as_dict() for name, tally in campaign.tallies.items()}
        document = {"seconds": round(seconds, 1), "violations": violations, "skipped": skipped, "faults": tallies}
        click.echo(json.dumps(document, indent=1))
    else:
        _print(campaign, skipped, seconds, violations)
    sys.exit(1 if violations else 0)


def _print(campaign: Campaign, skipped: dict[str, str], seconds: float, violations: list[str]) -> None:
    click.echo("| fault | tries | old in force | new in force | next succeeded | violations | seconds |")
    click.echo("| --- | --- | --- | --- | --- | --- | --- |")
    for name, tally in campaign.tallies.items():
        title = FAULTS[name].title if name in FAULTS else "no fault at all"
        figures = (tally.tries, tally.old, tally.new, tally.next_succeeded, len(tally.violations), round(tally.seconds))
        click.echo(f"| {title} | {' | '.join(map(str, figures))} |")
    for name, tally in campaign.tallies.items():
        click.echo(f"\n{name}: exit codes {dict(tally.codes)}, {dict(tally.moments)}")
        click.echo(
            f"  longest night {tally.longest:.1f} s, last process gone after {tally.gone_after:.1f} s, "
            f"{tally.looks:,} looks and {tally.nights_read:,} whole nights read, "
            f"{tally.semaphores:.0f} semaphores left in memory"
        )
        for message, count in tally.messages.most_common():
            click.echo(f"  {count} x {message}")
    for name, why in skipped.items():
        click.echo(f"\nleft out: {name}: {why}")
    click.echo(f"\n{seconds:.0f} s, {len(violations)} violations")
    for line in violations:
        click.echo(line)


if __name__ == "__main__":
    main()
