"""Nights that are killed, ended or interrupted, and nights that lose a worker."""

from __future__ import annotations

import os
import random
import signal
import time
from pathlib import Path

from benchmarks.faults.campaign import Campaign, Fault
from benchmarks.faults.trial import Running, Trial, signal_group
from benchmarks.faults.watching import family, kill_family, workers

__all__ = ["KILLS"]

BEYOND = 1.05
"""How far beyond the length of a night moments are spread, so that the very end is met as well."""

NEAR = 0.12
"""Seconds around the publication within which nights are killed there."""


def _wait_for(running: Running, number: int, of: int, campaign: Campaign, rng: random.Random) -> bool:
    """Wait for the moment of a try, spread evenly over the length of a night; False if the night has ended by then."""
    moment = (number - 1 + rng.random()) / of * BEYOND * campaign.length
    time.sleep(max(running.began + moment - time.monotonic(), 0.0))
    return running.process.poll() is None


def _ended_by(trial: Trial, running: Running, in_time: bool) -> None:
    """Note how far a night had got when it was ended, and hold the store to what must be so."""
    trial.count("moments", trial.moment() if in_time else "too late: it had ended")
    if not in_time:
        trial.add("too_late")
    code = trial.ended(running)
    trial.settle(code, told=code is not None and code >= 0 and code != 130)
    trial.next_night()


def kill_everything(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Kill the command, its workers and their solvers at once."""
    with campaign.trial("kill", number) as trial:
        trial.read_beside()
        running = trial.start()
        in_time = _wait_for(running, number, of, campaign, rng)
        signal_group(running.process.pid, signal.SIGKILL)
        kill_family(trial.mark)
        _ended_by(trial, running, in_time)


def kill_command(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Kill the command alone; its workers and their solvers have to end by themselves."""
    with campaign.trial("kill-command", number) as trial:
        trial.read_beside()
        running = trial.start()
        in_time = _wait_for(running, number, of, campaign, rng)
        signal_group(running.process.pid, signal.SIGKILL)
        _ended_by(trial, running, in_time)


def kill_at_publication(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Kill everything around the publication: from the moment on at which the manifest is written."""
    with campaign.trial("kill-at-publication", number) as trial:
        trial.read_beside()
        running = trial.start()
        while running.process.poll() is None and not list((trial.store / "aside").glob("*/manifest.json")):
            time.sleep(0.0005)
        time.sleep((number - 1 + rng.random()) / of * NEAR)
        in_time = running.process.poll() is None
        signal_group(running.process.pid, signal.SIGKILL)
        kill_family(trial.mark)
        _ended_by(trial, running, in_time)


def kill_worker(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Kill one worker, or every other time the solver of one, while parts are priced; the night must go on."""
    with campaign.trial("kill-worker", number) as trial:
        trial.read_beside()
        running = trial.start()
        while running.process.poll() is None and not workers(trial.mark):
            time.sleep(0.005)
        time.sleep((number - 1 + rng.random()) / of * 0.6 * campaign.length)
        found = workers(trial.mark)
        if number % 2 == 0:
            found = _solvers(trial, running) or found
        moment, hit = trial.moment(), False
        if found:
            try:
                os.kill(rng.choice(found), signal.SIGKILL)
                hit = True
            except ProcessLookupError:
                hit = False
        trial.count("moments", moment if hit else "too late: no worker was left")
        trial.add("too_late", float(not hit))
        trial.paths.spare = True
        code = trial.ended(running)
        if code != 0:
            trial.tell(f"the night did not go on without a worker, exit code {code}: {running.error.strip()[-200:]}")
        trial.settle(code)
        trial.next_night()


def _solvers(trial: Trial, running: Running) -> list[int]:
    """Wait a moment for a solver to run."""
    until = time.monotonic() + 2.0
    while time.monotonic() < until and running.process.poll() is None:
        found = [process for process, line in family(trial.mark).items() if Path(line.split()[0]).name == "cbc"]
        if found:
            return found
        time.sleep(0.002)
    return []


def end_or_interrupt(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """End the command by SIGTERM, or interrupt its process group as a terminal does."""
    with campaign.trial("end-or-interrupt", number) as trial:
        trial.read_beside()
        running = trial.start()
        in_time = _wait_for(running, number, of, campaign, rng)
        signal_group(running.process.pid, signal.SIGINT if number % 2 else signal.SIGTERM)
        _ended_by(trial, running, in_time)


KILLS = {
    "kill": Fault("everything killed (SIGKILL) at moments spread over the night", kill_everything, lambda n: n),
    "kill-command": Fault("the command killed, workers and solvers left alone", kill_command, lambda n: n // 10),
    "kill-at-publication": Fault("everything killed around the publication", kill_at_publication, lambda n: n // 8),
    "kill-worker": Fault("one worker or its solver killed", kill_worker, lambda n: n // 12),
    "end-or-interrupt": Fault("SIGTERM and SIGINT", end_or_interrupt, lambda n: n // 12),
}
