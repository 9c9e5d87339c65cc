"""The table schemas and their verdicts against frictionless, the reference library of the Table Schema standard.

Table Schema: https://datapackage.org/standard/table-schema/ (Data Package, version 2).

Deliberate differences, each with its own test below:

- an instant needs an offset from UTC, and must be written in ISO 8601: the standard's ``any`` format leaves both open;
- a whole number may be written 80.0 or 8e1, as spreadsheets do; the standard wants digits alone;
- digits may not be grouped by underscores; frictionless takes them because Python does;
- a column may be left out where our own property ``optional`` says so (the reference gets the schema without it), and
  columns may stand in any order.
"""

from __future__ import annotations

import json
import random
from pathlib import Path

import pytest
from frictionless import Package, Schema

from legworth.results import result_schemas
from network import Faults, input_schemas, table_schema
from network.reading import read_table
from tests.commands import run
from tests.folders import TABLES, Folder

ROOT = Path(__file__).parents[2]
SCHEMAS = sorted(ROOT.glob("*/schemas/*.json"))

Rows = set[tuple[str, int]]
"""Table and line of every faulty row."""


def descriptor(package: str, table: str) -> dict:
    return json.loads((ROOT / package / "schemas" / f"{table}.json").read_text(encoding="utf-8"))


def by_frictionless(
    path: Path, package: str, tables: list[str] | tuple[str, ...] = TABLES, *, keys: bool = True
) -> Rows:
    """Rows at fault by the reference library; a Data Package is needed for foreign keys."""
    resources = []
    for table in tables:
        schema = descriptor(package, table)
        header = (path / f"{table}.csv").read_bytes().partition(b"\n")[0].decode().strip().replace('"', "").split(",")
        schema["fields"] = [f for f in schema["fields"] if f["name"] in header or not f.get("optional")]
        if not keys:
            schema.pop("foreignKeys", None)
        resources.append({"name": table, "path": f"{table}.csv", "schema": schema, "encoding": "utf-8"})
    report = Package.from_descriptor({"name": "folder", "resources": resources}, basepath=str(path)).validate()
    assert not report.errors
    return {(task.name, getattr(error, "row_number", 1)) for task in report.tasks for error in task.errors}


def by_us(path: Path) -> Rows:
    """Rows at fault in single tables, by the reader alone."""
    faults = Faults()
    for schema in input_schemas().values():
        read_table(path, schema, faults)
    return {(fault.file.removesuffix(".csv"), fault.line) for fault in faults.errors}


def by_command(path: Path) -> Rows:
    """Rows at fault by the command line, with all checks between tables."""
    faults = json.loads(run("check", path, "--json").out)["faults"]
    return {(fault["file"].removesuffix(".csv"), fault["line"]) for fault in faults if not fault["warning"]}


@pytest.mark.parametrize("path", SCHEMAS, ids=lambda path: path.stem)
def test_every_schema_is_a_valid_descriptor(path: Path) -> None:
    report = Schema.validate_descriptor(json.loads(path.read_text(encoding="utf-8")))
    assert report.valid, [error.message for error in report.errors]


def test_every_schema_is_looked_at() -> None:
    assert {path.stem for path in SCHEMAS} >= {*input_schemas(), *result_schemas()}
    assert set(TABLES) == set(input_schemas())


@pytest.mark.parametrize("path", SCHEMAS, ids=lambda path: path.stem)
def test_schemas_are_loaded_as_they_are_declared(path: Path) -> None:
    theirs = Schema.from_descriptor(json.loads(path.read_text(encoding="utf-8")))
    ours = table_schema(path.parents[1].name, path.stem)
    assert ours.names == tuple(theirs.field_names)
    assert list(ours.key) == theirs.primary_key
    for column, field in zip(ours, theirs.fields, strict=True):
        assert column.type == field.type
        assert column.required == field.required
        for limit in ("minimum", "maximum", "pattern", "unique"):
            assert (getattr(column, limit) or None) == (field.constraints.get(limit) or None)


def test_sound_tables_are_sound_to_both(tmp_path: Path) -> None:
    path = Folder().write(tmp_path)
    assert by_frictionless(path, "network") == by_us(path) == by_command(path) == set()


def test_the_demo_is_sound_to_both() -> None:
    assert by_frictionless(ROOT / "demo_network", "network") == by_us(ROOT / "demo_network") == set()


def test_written_results_keep_their_schemas(tmp_path: Path) -> None:
    folder = Folder().write(tmp_path / "folder")
    assert run("price", folder, "--out", tmp_path / "out").code == 0
    tables = [path.stem for path in (tmp_path / "out").glob("*.csv")]
    assert {"bid_prices", "protection", "comparison", "connections"} <= {*tables}
    assert by_frictionless(tmp_path / "out", "legworth", tables) == set()


COMMON = ["", "abc", "NaN", "nan", "inf", "-Infinity", "-1", "0", "2.5", "+3", "0x10", "1,5", "NULL", "é", "-"]
SPECIAL = {
    "station": ["HUB", "N R", " NOR", "NOR ", "HUB"],
    "leg": ["L1", "L 1", "L2"],
    "legs": ["L1  L2", " L1", "L2 ", "L1 L9", "\tL1"],
    "itinerary": ["NOR-HUB", "HUB-SUD", "N H"],
    "fare_class": ["A", "B", "C"],
    "curve": ["early", "late"],
    "days_before": ["0", "7", "30", "1000", "1000.5"],
    "share": ["0", "1", "1.0001", "-0.0001"],
    "latitude": ["90", "90.01", "-90", "-91"],
    "longitude": ["180", "180.5", "-181"],
    "minimum_connection": ["2880", "2881", "-0.1"],
    "capacity": ["100000", "100001", "-7", "12.5"],
    "sold": ["100000", "100001", "7.25"],
    "fare": ["1e9", "1000000000.5", "-0.01", "1E2"],
    "mean": ["1000000", "1000001"],
    "deviation": ["1e6", "1.1e6"],
    "departs": ["2030-02-30T06:00+01:00", "2030-13-01T06:00+01:00", "yesterday", "2030-03-01T06:00:61+01:00"],
    "arrives": ["2030-03-01T25:00+01:00", "2031-02-29T06:00Z", "2031-02-28T06:00Z"],
}
NOT_COMMON = {"departs", "arrives"}


@pytest.mark.parametrize("seed", range(40))
def test_verdicts_on_cells_agree(seed: int, tmp_path: Path) -> None:
    """Types, missing values, limits, patterns and keys: a dozen cells changed at random, the same rows at fault."""
    rng, folder = random.Random(seed), Folder()
    for _ in range(12):
        table = rng.choice(TABLES)
        rows = folder.table(f"{table}.csv")
        column = rng.choice(list(rows.columns))
        pool = SPECIAL.get(column, []) + ([] if column in NOT_COMMON else COMMON)
        folder.cell(f"{table}.csv", rng.randrange(2, len(rows) + 2), column, rng.choice(pool or COMMON))
    path = folder.write(tmp_path)
    assert by_us(path) == by_frictionless(path, "network", keys=False)


def test_the_random_cells_hold_faults_and_sound_rows(tmp_path: Path) -> None:
    """The comparison above would be idle if every value, or none, were at fault."""
    found = []
    for column in ("share", "capacity", "station", "departs"):
        table = next(name for name in TABLES if column in Folder().table(f"{name}.csv"))
        for n, value in enumerate(SPECIAL[column]):
            path = Folder().cell(f"{table}.csv", 4, column, value).write(tmp_path / f"{column}{n}")
            found.append(bool(by_us(path)))
    assert 0 < sum(found) < len(found)


RELATED = {
    "unknown origin": ("legs.csv", 6, "origin", "WEST"),
    "unknown destination": ("legs.csv", 5, "destination", "WEST"),
    "unknown itinerary of a fare": ("fares.csv", 18, "itinerary", "WEST-HUB"),
    "unknown itinerary of demand": ("demand.csv", 18, "itinerary", "WEST-HUB"),
    "unknown class of demand": ("demand.csv", 18, "fare_class", "C"),
    "unknown curve": ("demand.csv", 9, "curve", "never"),
    "no curve at all": ("demand.csv", 9, "curve", ""),
}


@pytest.mark.parametrize("name", RELATED)
def test_verdicts_on_foreign_keys_agree(name: str, tmp_path: Path) -> None:
    path = Folder().cell(*RELATED[name]).write(tmp_path)
    assert by_command(path) == by_frictionless(path, "network")
    assert bool(by_command(path)) == (name != "no curve at all")


@pytest.mark.parametrize(
    ("line", "text"),
    [(3, "NOR-HUB,B"), (3, "NOR-HUB,B,80,1"), (18, "SUD-HUB,B,65,,")],
    ids=["too few", "too many", "too many and blank"],
)
def test_rows_of_the_wrong_length_are_faults_to_both(line: int, text: str, tmp_path: Path) -> None:
    path = Folder().line("fares.csv", line, text).write(tmp_path)
    assert by_us(path) == by_frictionless(path, "network", keys=False) == {("fares", line)}


OURS_ALONE = {
    "an instant without offset": ("legs.csv", 2, "departs", "2030-03-01T06:00"),
    "an instant in words": ("legs.csv", 2, "departs", "1 March 2030 06:00 +01:00"),
    "a date": ("legs.csv", 2, "departs", "2030-03-01"),
    "an offset of a day": ("legs.csv", 2, "departs", "2030-03-01T06:00+24:00"),
    "underscores among digits": ("fares.csv", 2, "fare", "1_20"),
}


@pytest.mark.parametrize("name", OURS_ALONE)
def test_what_we_alone_refuse(name: str, tmp_path: Path) -> None:
    path = Folder().cell(*OURS_ALONE[name]).write(tmp_path)
    assert by_us(path) == {(OURS_ALONE[name][0].removesuffix(".csv"), 2)}
    assert by_frictionless(path, "network", keys=False) == set()


def test_what_the_standard_alone_refuses(tmp_path: Path) -> None:
    whole = Folder().cell("legs.csv", 2, "capacity", "24.0").cell("legs.csv", 3, "capacity", "2e1")
    whole_path = whole.write(tmp_path / "whole")
    assert by_us(whole_path) == set()
    assert by_frictionless(whole_path, "network", keys=False) == {("legs", 2), ("legs", 3)}
    turned = Folder().frame("booking_curves.csv", lambda frame: frame[frame.columns[::-1]]).write(tmp_path / "turned")
    assert by_us(turned) == set()
    assert by_frictionless(turned, "network", keys=False) >= {("booking_curves", 1)}
