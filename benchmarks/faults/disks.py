"""Disks that are full: of bytes, of files, or of what a user may write into one file."""

from __future__ import annotations

import os
import random
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from benchmarks.faults.campaign import Campaign, Fault, Skip
from benchmarks.faults.ground import TONIGHT, Step
from benchmarks.faults.trial import OLD_STEPS

__all__ = ["DISKS"]

PLENTY = 64 << 20
MORE_THAN_NEEDED = 1.15
LONGEST = 240_000
"""Bytes that the longest file of a night stays below."""


@contextmanager
def _small_disk(place: Path) -> Iterator[Path]:
    """Mount a file system in memory."""
    place.mkdir(parents=True)
    try:
        subprocess.run(
            ["mount", "-t", "tmpfs", "-o", f"size={PLENTY}", "tmpfs", str(place)], check=True, capture_output=True
        )
    except (OSError, subprocess.CalledProcessError) as error:
        place.rmdir()
        raise Skip("this user may not mount a small file system") from error
    try:
        yield place
    finally:
        subprocess.run(["umount", "--lazy", str(place)], check=True)
        place.rmdir()


def _size_and_files(folder: Path) -> tuple[int, int]:
    """Return bytes, in whole pages, and files of a folder."""
    page = os.sysconf("SC_PAGE_SIZE")
    seen = {(stat.st_ino): stat for stat in (path.stat() for path in folder.rglob("*"))}
    return sum(-(-stat.st_size // page) * page for stat in seen.values()), len(seen)


def _needed(campaign: Campaign) -> tuple[int, int]:
    """Return bytes and files that a night needs beside the store of the nights before it."""
    before, after = (_size_and_files(campaign.ground.store_after(steps)) for steps in (OLD_STEPS, _AFTER))
    folder = _size_and_files(campaign.ground.store_after(OLD_STEPS).with_name("folder"))
    return after[0] - before[0] + folder[0], after[1] - before[1] + folder[1]


_AFTER = (*OLD_STEPS, Step(TONIGHT))


def full_of_bytes(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Fill the disk of the store up to some bytes; every other time temporary files go there as well."""
    _full(campaign, number, (number - 1 + rng.random()) / of, of_files=False)


def full_of_files(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Leave the disk of the store room for only so many files."""
    _full(campaign, number, (number - 1 + rng.random()) / of, of_files=True)


def _full(campaign: Campaign, number: int, level: float, *, of_files: bool) -> None:
    name = "disk-without-files" if of_files else "disk-full"
    room = _needed(campaign)[of_files] * MORE_THAN_NEEDED * level
    with (
        _small_disk(campaign.scratch / "disks" / f"{name}-{number}") as disk,
        campaign.trial(name, number, disk=disk) as trial,
    ):
        if number % 2 == 0:
            trial.temporary = disk / "tmp"
            trial.temporary.mkdir()
        stat, ballast = os.statvfs(disk), disk / "ballast"
        if of_files:
            _remount(disk, f"nr_inodes={stat.f_files - stat.f_ffree + int(room)}")
        else:
            with ballast.open("wb") as file:
                os.posix_fallocate(file.fileno(), 0, max(stat.f_bavail * stat.f_bsize - int(room), 1))
        trial.paths.spare = True
        trial.read_beside()
        code = trial.ended(trial.start())
        if code not in (0, 2):
            trial.tell(f"a full disk ended with {code}")
        trial.settle(code)
        ballast.unlink(missing_ok=True)
        _remount(disk, f"nr_inodes={stat.f_files}")
        trial.next_night()


def _remount(disk: Path, options: str) -> None:
    subprocess.run(["mount", "-o", f"remount,{options}", str(disk)], check=True, capture_output=True)


def files_too_long(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Let no file become longer than some bytes (``ulimit -f``)."""
    blocks = int((number - 1 + rng.random()) / of * LONGEST / 512)
    with campaign.trial("files-too-long", number) as trial:
        trial.paths.spare = True
        trial.read_beside()
        trial.before = ("sh", "-c", f'ulimit -S -f {blocks}; exec "$@"', "sh")
        code = trial.ended(trial.start())
        trial.before = ()
        if code not in (0, 2):
            trial.tell(f"a file that may not become longer ended with {code}")
        trial.settle(code)
        trial.next_night()


DISKS = {
    "disk-full": Fault("the disk of the store full at many points", full_of_bytes, lambda n: n // 8),
    "disk-without-files": Fault("no room for another file at many points", full_of_files, lambda n: n // 20),
    "files-too-long": Fault("files that may not become longer", files_too_long, lambda n: n // 20),
}
