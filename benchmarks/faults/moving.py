"""Others at work at the same time: on the tables, on the store, on the clock."""

from __future__ import annotations

import os
import random
import subprocess
import threading
import time
from collections.abc import Callable
from datetime import timedelta
from pathlib import Path

from benchmarks.faults.campaign import Campaign, Fault, Skip
from benchmarks.faults.ground import BEFORE, FIRST, TONIGHT, VARYING
from benchmarks.faults.trial import Trial

__all__ = ["MOVING"]

WINDOW = 0.12
"""Seconds after the night holds the store within which tables are meddled with."""

CHUNK = 4096


def _replace(path: Path, data: bytes) -> None:
    """Put a file in the place of another by a rename, as careful writers do."""
    new = path.with_name(f"{path.name}.other")
    new.write_bytes(data)
    new.replace(path)


def _rewrite(path: Path, data: bytes) -> None:
    """Write into the file itself, piece by piece, as careless writers do."""
    with path.open("r+b", buffering=0) as file:
        file.truncate(0)
        for start in range(0, len(data), CHUNK):
            file.write(data[start : start + CHUNK])


class _Meddler(threading.Thread):
    """Changes one table to and fro once the night has begun."""

    def __init__(self, trial: Trial, file: str, write: Callable[[Path, bytes], None], rng: random.Random) -> None:
        super().__init__(daemon=True)
        self.trial, self.file, self.write, self.rng = trial, file, write, rng
        self.stop = threading.Event()
        self.changes = 0

    def run(self) -> None:
        """Wait for the night to begin, and change the table a few times."""
        store, path = self.trial.store, self.trial.folder / self.file
        states = self.trial.ground.states
        while not any((store / "aside").iterdir()) and not self.stop.is_set():
            time.sleep(0.0005)
        time.sleep(self.rng.uniform(0.0, WINDOW))
        for turn in range(self.rng.randint(1, 6)):
            if self.stop.is_set():
                return
            self.write(path, states[(BEFORE, TONIGHT)[turn % 2]][self.file])
            self.changes += 1
            time.sleep(self.rng.expovariate(1 / 0.015))


def _meddled(
    campaign: Campaign, name: str, number: int, rng: random.Random, write: Callable[[Path, bytes], None]
) -> None:
    file = VARYING[number % len(VARYING)]
    with campaign.trial(name, number) as trial:
        trial.read_beside()
        running = trial.start()
        meddler = _Meddler(trial, file, write, rng)
        meddler.start()
        code = trial.ended(running)
        meddler.stop.set()
        meddler.join()
        if code not in (0, 2):
            trial.tell(f"tables that moved ended with {code}")
        trial.settle(code, states=frozenset({TONIGHT, f"tonight but {file}"}))
        _replace(trial.folder / file, trial.ground.states[TONIGHT][file])
        trial.next_night()


def tables_replaced(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Replace a table by renames while it is read."""
    _meddled(campaign, "tables-replaced", number, rng, _replace)


def tables_rewritten(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Write into a table while it is read."""
    _meddled(campaign, "tables-rewritten", number, rng, _rewrite)


def at_once(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Start two or three nights at once."""
    with campaign.trial("at-once", number) as trial:
        trial.read_beside()
        runs = []
        for _ in range(2 + number % 2):
            runs.append(trial.start())
            time.sleep(rng.choice([0.0, rng.uniform(0.0, 0.3 * campaign.length)]))
        for running in runs:
            running.wait()
        codes = [trial.ended(running) for running in runs]
        if 0 not in codes or not {0, 2} >= set(codes):
            trial.tell(f"nights at once ended with {codes}")
        for code, running in zip(codes, runs, strict=True):
            if code == 2 and "another process is putting a night into" not in running.error:
                trial.tell(f"refused for another reason: {running.error.strip()[-200:]}")
        trial.settle(0, before=None)
        trial.next_night()


CLOCK = r"""
#define _GNU_SOURCE
#include <dlfcn.h>
#include <stdlib.h>
#include <sys/time.h>
#include <time.h>

static long shift(void) {
    static unsigned calls;
    const char *by = getenv("CAMPAIGN_CLOCK");
    if (!by) return 0;
    if (by[0] != '?') return atol(by);
    calls++;
    return (long)(calls * 2654435761u % 172800u) - 86400;
}

int clock_gettime(clockid_t id, struct timespec *at) {
    static int (*real)(clockid_t, struct timespec *);
    if (!real) real = (int (*)(clockid_t, struct timespec *))dlsym(RTLD_NEXT, "clock_gettime");
    int code = real(id, at);
    if (!code && (id == CLOCK_REALTIME || id == CLOCK_REALTIME_COARSE)) at->tv_sec += shift();
    return code;
}

int gettimeofday(struct timeval *at, void *zone) {
    struct timespec now;
    (void)zone;
    int code = clock_gettime(CLOCK_REALTIME, &now);
    at->tv_sec = now.tv_sec;
    at->tv_usec = now.tv_nsec / 1000;
    return code;
}

time_t time(time_t *at) {
    struct timespec now;
    clock_gettime(CLOCK_REALTIME, &now);
    if (at) *at = now.tv_sec;
    return now.tv_sec;
}
"""
CLOCKS = (
    ("ten days back", str(-10 * 86_400)),
    ("a year ahead", str(365 * 86_400)),
    ("jumping by up to a day at every look", "?"),
    ("files from the future", ""),
    ("a snapshot older than last night's", ""),
)


def _clock_library(campaign: Campaign) -> Path:
    """Compile a clock to be put before the system's."""
    library = campaign.scratch / "clock.so"
    if not library.exists():
        source = campaign.scratch / "clock.c"
        source.write_text(CLOCK)
        part = library.with_suffix(f".{threading.get_ident()}")
        command = ["cc", "-O1", "-shared", "-fPIC", "-o", str(part), str(source), "-ldl"]
        try:
            subprocess.run(command, check=True, capture_output=True)
        except (OSError, subprocess.CalledProcessError) as error:
            raise Skip("there is no C compiler to make a clock that is wrong") from error
        part.replace(library)
    return library


def wrong_clock(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Set the clock of a night and its workers back or ahead, or let it jump, or give files or tables odd times."""
    title, by = CLOCKS[number % len(CLOCKS)]
    environment = {"LD_PRELOAD": str(_clock_library(campaign)), "CAMPAIGN_CLOCK": by} if by else {}
    with campaign.trial("wrong-clock", number) as trial:
        trial.count("moments", title)
        if title.startswith("files"):
            ahead = time.time() + timedelta(days=400).total_seconds()
            for path in [*trial.store.rglob("*"), *trial.folder.iterdir()]:
                os.utime(path, (ahead, ahead))
        older = title.startswith("a snapshot")
        if older:
            trial.ground.write(FIRST, trial.folder)
        trial.read_beside()
        running = trial.start(**environment)
        code = trial.ended(running)
        if code != (4 if older else 0):
            trial.tell(f"a clock with {title} ended with {code}: {running.error.strip()[-200:]}")
        trial.settle(code)
        trial.ground.write(TONIGHT, trial.folder)
        trial.next_night()


MOVING = {
    "tables-replaced": Fault("a table replaced by renames while it is read", tables_replaced, lambda n: n // 11),
    "tables-rewritten": Fault("a table written into while it is read", tables_rewritten, lambda n: n // 11),
    "at-once": Fault("two and three nights at once", at_once, lambda n: n // 20),
    "wrong-clock": Fault("clock, times of files or snapshot set back or ahead", wrong_clock, lambda n: n // 20),
}
