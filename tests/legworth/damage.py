"""Random damage to a folder: bytes, lines and cells."""

from __future__ import annotations

import csv
import io
import random
import re
from collections.abc import Callable

from tests.folders import Folder

__all__ = ["damage"]

WORDS = [
    *(
        "",
        " ",
        ",",
        '"',
        '""',
        "\n",
        "\r",
        "\0",
        "\ufeff",
        "\x1b[0m",
        "é",
        "日本",
        "\u2028",
        "-",
        "[",
        "]",
        "=",
        "#",
        "'",
    ),
    *(
        "NaN",
        "nan",
        "inf",
        "-inf",
        "null",
        "true",
        "0",
        "-0",
        "-1",
        "1",
        "0.5",
        "1e-9",
        "1e9",
        "1e308",
        "1e999",
        "9" * 20,
    ),
    *("0x1F", "1_0", "1,5", "2.0", "A", "B", "Z", "L1", "L1 L2", "L2 L1", "L1  L2", "L1 L1", "L9", "HUB", "NOR", "OST"),
    *("NOR-HUB", "HUB-SUD", "early", "name", "[defaults]", "x" * 5000, "2030-03-01T06:00+01:00", "2030-03-01T06:00"),
    *("2030-02-30T06:00Z", "9999-12-31T23:59-14:00", "0001-01-01T00:00+14:00", "2030-03-01T06:00:60Z"),
]
BYTES = [b"", b"\xff", b"\xfe\xff", b"\0", b"\n", b"\r", b",", b'"', b";", b"\xc3", b"9", b"-", b".", b"e", b" ", b"\t"]


def in_bytes(content: bytes, rng: random.Random) -> bytes:
    """Change, drop, put in or repeat a few bytes."""
    first = rng.randrange(len(content) + 1)
    last = min(len(content), first + rng.choice([0, 0, 1, 1, 2, 9, 200]))
    middle = rng.choice([rng.choice(BYTES), rng.randbytes(rng.randint(1, 4)), 2 * content[first:last]])
    return content[:first] + middle + content[last:]


def in_lines(content: bytes, rng: random.Random) -> bytes:
    """Drop, repeat, swap, join or cut off lines."""
    lines = content.splitlines(keepends=True) or [b""]
    one, other = rng.randrange(len(lines)), rng.randrange(len(lines))
    match rng.randrange(5):
        case 0:
            del lines[one]
        case 1:
            lines.insert(other, lines[one])
        case 2:
            lines[one], lines[other] = lines[other], lines[one]
        case 3:
            lines[one] = lines[one].rstrip(b"\n")
        case _:
            del lines[one:]
    return b"".join(lines)


def in_cells(content: bytes, rng: random.Random) -> bytes:
    """Write another word, or the value of another cell, into a cell."""
    try:
        rows = list(csv.reader(io.StringIO(content.decode(), newline="")))
    except (UnicodeDecodeError, csv.Error):
        return content
    cells = [(r, c) for r, row in enumerate(rows) for c in range(len(row))]
    if not cells:
        return content
    (row, column), (other, place) = rng.choice(cells), rng.choice(cells)
    rows[row][column] = rng.choice([rng.choice(WORDS), rows[other][place], rows[row][column] + rng.choice(WORDS)])
    out = io.StringIO()
    csv.writer(out, lineterminator="\n").writerows(rows)
    return out.getvalue().encode()


def in_figures(content: bytes, rng: random.Random) -> bytes:
    """Write other figures, small or great but sound, in the place of some."""
    figures = [match for match in re.finditer(rb"(?<=,)[0-9.]+(?=[,\n])", content) if rng.random() < 0.2]
    for match in reversed(figures):
        figure = rng.choice([0.0, 1.0, rng.random(), 10 ** rng.uniform(-6, 6), rng.uniform(0, 40)])
        new = f"{figure:.0f}" if rng.random() < 0.5 else repr(figure)
        content = content[: match.start()] + new.encode() + content[match.end() :]
    return content


KINDS: list[Callable[[bytes, random.Random], bytes]] = [in_bytes, in_lines, in_cells, in_cells, in_figures]


def damage(seed: int) -> Folder:
    """Damage the sound folder in one to three places."""
    rng, folder = random.Random(seed), Folder()
    if rng.random() < 0.25:
        for table in ("fares.csv", "demand.csv"):
            folder.put(table, in_figures(folder.bytes(table), rng))
        return folder
    for _ in range(rng.choice([1, 1, 2, 3])):
        file = rng.choice(list(folder.files))
        folder.put(file, rng.choice(KINDS)(folder.bytes(file), rng))
    if rng.random() < 0.1:
        one, other = rng.sample(list(folder.files), 2)
        folder.files[one], folder.files[other] = folder.files[other], folder.files[one]
    return folder
