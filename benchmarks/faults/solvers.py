"""Solvers that die, hang, or say what is not so: another program in the place of CBC."""

from __future__ import annotations

import random
from pathlib import Path

import pulp

from benchmarks.faults.campaign import Campaign, Fault
from benchmarks.faults.ground import TONIGHT

__all__ = ["SOLVERS"]

IN_FRONT = """import os
import pulp
pulp.PULP_CBC_CMD.pulp_cbc_path = os.environ["CAMPAIGN_SOLVER"]
"""
SCRIPT = r"""#!/bin/sh
n=1
while ! mkdir "$CAMPAIGN_CALLS/$n" 2>/dev/null; do n=$((n + 1)); done
if [ "$CAMPAIGN_CALL" != all ] && [ "$CAMPAIGN_CALL" != $n ]; then exec @CBC@ "$@"; fi
solution=$(printf '%s\n' "$@" | grep '[.]sol$')
case $CAMPAIGN_HOW in
    die) kill -SEGV $$ ;;
    hang) exec sleep 3600 ;;
    hang-and-lose-worker) kill -KILL $PPID; exec sleep 3600 ;;
    kill-worker) kill -KILL $PPID ;;
    nothing) exit 0 ;;
    nonsense) echo 'no solution here, 1 2 3' >"$solution" ;;
    half) @CBC@ "$@"; size=$(wc -c <"$solution"); head -c $((size / 2)) "$solution" >"$solution.h"
          mv "$solution.h" "$solution" ;;
    wrong) @CBC@ "$@"; awk 'NR > 1 { $3 = $3 * 0.97; $4 = $4 * 1.02 } { print }' "$solution" >"$solution.h"
           mv "$solution.h" "$solution" ;;
    unwilling) @CBC@ "$@"; sed '1s/^Optimal/Infeasible/' "$solution" >"$solution.h"; mv "$solution.h" "$solution" ;;
esac
"""
PART_SECONDS = 15
HOW = ("die", "hang", "kill-worker", "nonsense", "half", "wrong", "unwilling", "nothing", "hang-and-lose-worker")
CALLS = 4
"""One of the first so many calls of a night goes wrong; two parts that are solved make at least as many."""

SOLVED = 2


def solver_fails(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Let CBC fail once, or always, in one of the ways above; the night must be mended or stopped in time."""
    how, always = HOW[number % len(HOW)], (number // len(HOW)) % 2 == 1
    with campaign.trial("solver-fails", number, part_seconds=PART_SECONDS) as trial:
        trial.count("moments", f"{how}, {'always' if always else 'once'}")
        calls = trial.place / "calls"
        calls.mkdir()
        trial.paths.spare = True
        running = trial.start(
            CAMPAIGN_SOLVER=str(_put_in_front(campaign)),
            PYTHONPATH=str(campaign.scratch / "in_front"),
            CAMPAIGN_CALLS=str(calls),
            CAMPAIGN_CALL="all" if always else str(rng.randint(1, CALLS)),
            CAMPAIGN_HOW=how,
        )
        trial.read_beside()
        # every part that is solved may take its time once with either solver, and the night that it takes anyhow
        code = trial.ended(running, 2 * PART_SECONDS * SOLVED + 8 * campaign.length)
        deadly = always and how in ("kill-worker", "hang-and-lose-worker")
        if code != (3 if deadly else 0):
            trial.tell(f"{how}: the night ended with {code}: {running.error.strip()[-200:]}")
        if not list(calls.iterdir()):
            trial.tell("the other program was never called")
        trial.settle(code)
        trial.ground.write(TONIGHT, trial.folder)
        trial.next_night()


def _put_in_front(campaign: Campaign) -> Path:
    place = campaign.scratch / "in_front"
    script = place / "solver"
    if not script.exists():
        place.mkdir(exist_ok=True)
        (place / "sitecustomize.py").write_text(IN_FRONT)
        new = place / f"solver.{random.random()}"
        new.write_text(SCRIPT.replace("@CBC@", str(pulp.PULP_CBC_CMD.pulp_cbc_path)))
        new.chmod(0o755)
        new.replace(script)
    return script


SOLVERS = {"solver-fails": Fault("a solver that dies, hangs or lies", solver_fails, lambda n: n // 11)}
