"""The command: a network folder from a schedule, written whole or not at all, and nothing else touched."""

from __future__ import annotations

import json
from datetime import UTC, date, datetime
from pathlib import Path

import pandas as pd
import pytest

from legworth.schedules import folder
from network import read_folder
from tests.commands import Outcome, run
from tests.legworth.schedules.feeds import FEED, as_zip
from tests.legworth.schedules.ssim_writer import Leg, write
from tests.legworth.schedules.test_flight_table import HEADER, ROWS

LEGS = [
    Leg(number=1, origin="AAA", destination="HUB", departs=480, arrives=560),
    Leg(number=2, origin="HUB", destination="BBB", departs=620, arrives=700),
    Leg(number=3, origin="HUB", destination="CCC", departs=1000, arrives=1100),
    Leg(number=9, origin="CCC", destination="AAA", departs=1100, arrives=1200),
    Leg(number=9, sequence=2, origin="AAA", destination="BBB", departs=1210, arrives=1290),
]
STATIONS = """\
station,name,latitude,longitude,minimum_connection,timezone
AAA,Alde,50,8,,Europe/Berlin
BBB,Bolm,52,9,,Europe/Berlin
CCC,Cors,53,7,,
HUB,Hubworth,51,8.5,45,Europe/Berlin
ZZZ,Unused,0,0,,
"""


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "winter.ssim"
    path.write_bytes(write(("ZQ", LEGS)))
    return path


def made(file: Path, out: Path, *more: str | Path, first: str = "2027-03-01", last: str = "2027-03-02") -> Outcome:
    return run("schedule", file, "--out", out, "--from", first, "--to", last, *more)


def content(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in sorted(folder.iterdir())}


def table(folder: Path, name: str) -> pd.DataFrame:
    return pd.read_csv(folder / f"{name}.csv", dtype=str, keep_default_na=False)


def with_fares(folder: Path) -> None:
    """Fares and demand for every itinerary, so that the folder can be read."""
    names = table(folder, "itineraries")["itinerary"]
    fares = pd.DataFrame({"itinerary": names, "fare_class": "Y", "fare": 100})
    fares.to_csv(folder / "fares.csv", index=False)
    fares.rename(columns={"fare": "mean"}).assign(deviation=10).to_csv(folder / "demand.csv", index=False)


def test_a_new_folder_is_a_network_once_it_has_fares(file: Path, tmp_path: Path) -> None:
    out = tmp_path / "made"
    outcome = made(file, out, "--currency", "EUR", "--name", 'Zephyr "Q"')
    assert (outcome.code, outcome.err) == (0, "")
    assert "Legs" in outcome.out
    assert sorted(content(out)) == ["itineraries.csv", "legs.csv", "network.toml", "stations.csv"]
    assert table(out, "legs")["leg"].tolist()[:5] == [
        f"ZQ{name}" for name in ("1-0301", "2-0301", "3-0301", "9-0301", "9-0301B")
    ]
    assert table(out, "legs").columns.tolist() == [
        "leg", "origin", "destination", "departs", "arrives", "capacity", "sold", "through",
    ]  # fmt: skip
    with_fares(out)
    network = read_folder(out).network
    assert (network.name, network.currency) == ('Zephyr "Q"', "EUR")
    assert network.as_of == datetime(2027, 2, 28, tzinfo=UTC)
    assert network.n_legs == 10
    paths = table(out, "itineraries")["legs"].tolist()
    assert "ZQ1-0301 ZQ2-0301" in paths
    assert "ZQ9-0301 ZQ9-0301B" in paths, "10 minutes on the same aircraft are enough"
    assert not any("ZQ3-0301" in path and " " in path for path in paths), "440 minutes are more than the longest"


def test_rules_and_stations_of_the_folder_hold(file: Path, tmp_path: Path) -> None:
    out = tmp_path / "made"
    out.mkdir()
    (out / "stations.csv").write_text(STATIONS.replace("HUB,Hubworth,51,8.5,45", "HUB,Hubworth,51,8.5,61"))
    (out / "network.toml").write_text(
        'name = "N"\ncurrency = "EUR"\nas_of = "2027-01-01T00:00Z"\n'
        "[connections]\nmaximum_connection = 600\ndetour = 100\n"
    )
    before = (out / "network.toml").read_bytes()
    assert made(file, out).code == 0
    paths = table(out, "itineraries")["legs"].tolist()
    assert "ZQ1-0301 ZQ2-0301" not in paths, "60 minutes are less than 61"
    assert "ZQ1-0301 ZQ3-0301" in paths
    assert (out / "network.toml").read_bytes() == before
    stations = table(out, "stations")
    assert stations["station"].tolist() == ["AAA", "BBB", "CCC", "HUB"]
    assert stations["timezone"].tolist() == ["Europe/Berlin", "Europe/Berlin", "", "Europe/Berlin"]
    assert stations["minimum_connection"].tolist() == ["", "", "", "61"]


def test_a_table_of_stations_must_have_them_all(file: Path, tmp_path: Path) -> None:
    stations = tmp_path / "stations.csv"
    stations.write_text(STATIONS.replace("CCC,Cors,53,7,,\n", ""))
    outcome = made(file, tmp_path / "made", "--stations", stations, "--json")
    faults = json.loads(outcome.out)["faults"]
    assert outcome.code == 2
    assert [(fault["line"], fault["column"]) for fault in faults] == [
        (13, "55-57 arrival station"),
        (14, "37-39 departure station"),
    ]
    assert not (tmp_path / "made").exists()


def test_other_tables_are_left_alone_and_seats_sold_are_kept(file: Path, tmp_path: Path) -> None:
    out = tmp_path / "made"
    assert made(file, out).code == 0
    with_fares(out)
    (out / "booking_curves.csv").write_text("curve,days_before,share\nc,0,1\n")
    (out / "notes.txt").write_text("mine")
    legs = table(out, "legs")
    legs.loc[legs["leg"] == "ZQ1-0302", "sold"] = "17"
    legs.loc[legs["leg"] == "ZQ2-0301", "sold"] = "5"
    legs.to_csv(out / "legs.csv", index=False)
    before = content(out)
    outcome = made(file, out, "--json", first="2027-03-02", last="2027-03-03")
    document = json.loads(outcome.out)
    after = content(out)
    assert outcome.code == 0
    for name in ("fares.csv", "demand.csv", "booking_curves.csv", "notes.txt", "network.toml"):
        assert after[name] == before[name]
    assert set(after) == set(before)
    sold = table(out, "legs").set_index("leg")["sold"]
    assert sold["ZQ1-0302"] == "17"
    assert sold["ZQ1-0303"] == "0"
    assert document["legs_with_sold_kept"] == 5
    assert document["legs_sold_but_gone"] == ["ZQ2-0301"]
    assert document["rows_without_itinerary"]["fares.csv"] > 0
    legs = table(out, "legs")
    legs.assign(sold="2").to_csv(out / "legs.csv", index=False)
    outcome = made(file, out, first="2027-03-03", last="2027-03-03")
    assert "Caution: 5 legs with seats sold are not in this schedule (ZQ1-0302, ZQ2-0302," in outcome.out


def test_pairs_that_sell_nothing_get_no_itinerary_unless_asked(file: Path, tmp_path: Path) -> None:
    out = tmp_path / "made"
    assert made(file, out).code == 0
    with_fares(out)
    fares = table(out, "fares")
    keep = fares["itinerary"].str.startswith("AAA-BBB") | fares["itinerary"].str.startswith("AAA-HUB-BBB")
    for name in ("fares", "demand"):
        table(out, name)[keep].to_csv(out / f"{name}.csv", index=False)
    assert made(file, out).code == 0
    assert {"AAA-"} == set(table(out, "itineraries")["itinerary"].str[:4])
    assert made(file, out, "--all-pairs").code == 0
    assert {"AAA-", "HUB-", "CCC-"} == set(table(out, "itineraries")["itinerary"].str[:4])


def test_parquet_tables_of_the_same_name_are_replaced(file: Path, tmp_path: Path) -> None:
    out = tmp_path / "made"
    assert made(file, out).code == 0
    for name in ("stations", "legs", "itineraries"):
        frame = pd.read_csv(out / f"{name}.csv")
        if name == "legs":
            frame["sold"] = 3
        frame.to_parquet(out / f"{name}.parquet", index=False)
        (out / f"{name}.csv").unlink()
    assert made(file, out).code == 0
    assert sorted(content(out)) == ["itineraries.csv", "legs.csv", "network.toml", "stations.csv"]
    assert set(table(out, "legs")["sold"]) == {"3"}


def test_without_itineraries(file: Path, tmp_path: Path) -> None:
    assert made(file, tmp_path / "made", "--no-itineraries").code == 0
    assert sorted(content(tmp_path / "made")) == ["legs.csv", "network.toml", "stations.csv"]


def test_a_faulty_schedule_changes_nothing(file: Path, tmp_path: Path) -> None:
    out = tmp_path / "made"
    assert made(file, out).code == 0
    before = content(out)
    file.write_bytes(file.read_bytes().replace(b"Y180", b"NONE"))
    outcome = made(file, out)
    assert outcome.code == 2
    assert "73-75 aircraft type: nothing gives the seats of equipment '320'" in outcome.err
    assert content(out) == before


def test_a_faulty_folder_changes_nothing(file: Path, tmp_path: Path) -> None:
    out = tmp_path / "made"
    assert made(file, out).code == 0
    (out / "legs.csv").write_text((out / "legs.csv").read_text().replace(",180,0", ",180,-1", 1))
    (out / "network.toml").write_text('name = "N"\n')
    before = content(out)
    outcome = made(file, out)
    assert outcome.code == 2
    assert "legs.csv:2: sold" in outcome.err
    assert "network.toml" in outcome.err
    assert content(out) == before


def test_a_failure_while_writing_leaves_the_folder_as_it_was(
    file: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    out = tmp_path / "made"
    assert made(file, out).code == 0
    before = content(out)

    def full(path: Path, frame: pd.DataFrame) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(folder, "write_table", full)
    outcome = made(file, out, last="2027-03-05")
    assert outcome.code == 2
    assert "No space left on device" in outcome.err
    assert content(out) == before
    assert made(file, tmp_path / "other").code == 2
    assert not (tmp_path / "other").exists()


def test_a_feed_and_a_plain_table_are_told_by_their_content(tmp_path: Path) -> None:
    seats = tmp_path / "seats.csv"
    seats.write_text("equipment,seats\nR1,400\n*,50\n")
    feed = as_zip(FEED, tmp_path / "anything.bin")
    outcome = made(feed, tmp_path / "feed", "--seats", seats, "--json", "--kinds", "rail,ferry")
    assert outcome.code == 0
    assert json.loads(outcome.out)["stations"] == 4
    assert set(table(tmp_path / "feed", "legs")["kind"]) == {"rail", "ferry"}
    stations = tmp_path / "zones.csv"
    zones = {"BER": "Europe/Berlin", "NYC": "America/New_York", "APW": "Pacific/Apia", "HNL": "Pacific/Honolulu"}
    stations.write_text(
        "station,timezone\n" + "".join(f"{name},{zone}\n" for name, zone in zones.items()) + "TYO,Asia/Tokyo\n"
    )
    plain = tmp_path / "summer.txt"
    plain.write_text("\n".join([HEADER, *ROWS]))
    outcome = made(plain, tmp_path / "plain", "--seats", seats, "--stations", stations, "--json")
    assert outcome.code == 0, outcome.out
    assert json.loads(outcome.out)["legs"] == 3


def test_restricted_rides_become_no_itineraries(tmp_path: Path) -> None:
    file = tmp_path / "r.ssim"
    legs = [
        Leg(number=1, origin="AAA", destination="HUB", departs=480, arrives=560, traffic="K"),
        Leg(number=2, origin="HUB", destination="BBB", departs=620, arrives=700),
        Leg(number=3, origin="HUB", destination="CCC", departs=620, arrives=700, traffic="B"),
    ]
    file.write_bytes(write(("ZQ", legs)))
    outcome = made(file, tmp_path / "made", "--json", last="2027-03-01")
    assert table(tmp_path / "made", "itineraries")["legs"].tolist() == ["ZQ1-0301 ZQ2-0301", "ZQ2-0301", "ZQ3-0301"]
    assert json.loads(outcome.out)["connections"]["dropped"]["permitted"]["count"] == 2


def test_a_ride_that_may_not_be_sold_keeps_no_connection_out(tmp_path: Path) -> None:
    """The leg straight from AAA to BBB carries connecting traffic only, so the connection over HUB stays."""
    file = tmp_path / "r.ssim"
    legs = [
        Leg(number=1, origin="AAA", destination="HUB", departs=480, arrives=560),
        Leg(number=2, origin="HUB", destination="BBB", departs=620, arrives=700),
        Leg(number=5, origin="AAA", destination="BBB", departs=490, arrives=600),
    ]
    for code, number in ((" ", 0), ("K", 1)):
        file.write_bytes(write(("ZQ", [*legs[:2], legs[2].but(traffic=code)])))
        assert made(file, tmp_path / "made", last="2027-03-01").code == 0
        paths = table(tmp_path / "made", "itineraries")["legs"].tolist()
        assert paths.count("ZQ1-0301 ZQ2-0301") == number


OPTIONS = {
    "dates turned round": (["--from", "2027-03-02", "--to", "2027-03-01"], "turn them round"),
    "nothing runs then": (["--from", "2031-03-02", "--to", "2031-03-03"], "nothing in winter.ssim runs"),
    "a date that is none": (["--from", "2027-02-30"], "2027-02-30"),
    "an instant without offset": (["--as-of", "2027-01-01T00:00"], "no offset"),
    "no instant": (["--as-of", "yesterday"], "is not a date and time"),
    "no letters": (["--cabins", "c1"], "--cabins"),
    "no kind": (["--kinds", "rail,"], "no kind of route"),
    "no currency": (["--currency", ""], "--currency"),
    "no seats table": (["--seats", "nowhere.csv"], "no such file"),
    "no stations table": (["--stations", "nowhere.csv"], "no such file"),
    "another format": (["--format", "gtfs"], "zip"),
    "a plain table it is not": (["--format", "csv"], "winter.ssim"),
}


@pytest.mark.parametrize("name", OPTIONS)
def test_options_that_cannot_be(name: str, file: Path, tmp_path: Path) -> None:
    given, word = OPTIONS[name]
    outcome = run("schedule", file, "--out", tmp_path / "made", "--from", "2027-03-01", "--to", "2027-03-02", *given)
    assert outcome.code == 2
    assert word in outcome.err
    assert not (tmp_path / "made").exists()


@pytest.mark.parametrize("what", ["missing", "folder", "far too long", "output is a file"])
def test_paths_that_cannot_be(what: str, file: Path, tmp_path: Path) -> None:
    (tmp_path / "empty").mkdir()
    names = {"missing": "no.ssim", "folder": "empty", "far too long": "x" * 5000}
    source = tmp_path / names[what] if what in names else file
    out = file if what == "output is a file" else tmp_path / "made"
    assert made(source, out).code == 2


@pytest.mark.parametrize(
    ("given", "kind", "told"),
    [
        (("--kinds", "rail"), "ssim", "--kinds is for a GTFS feed, and winter.ssim is read as an airline schedule"),
        (("--kinds", "rail"), "csv", "--kinds is for a GTFS feed, and flights.csv is read as a plain table"),
        (("--cabins", "C"), "csv", "--cabins is for an airline schedule, and flights.csv is read as a plain table"),
        (
            ("--service-types", "J"),
            "gtfs",
            "--service-types is for an airline schedule, and feed.zip is read as a GTFS",
        ),
        (("--partner-legs",), "gtfs", "--partner-legs is for an airline schedule, and feed.zip is read as a GTFS feed"),
    ],
)
def test_options_of_another_format_are_refused(
    given: tuple[str, ...], kind: str, told: str, file: Path, tmp_path: Path
) -> None:
    """They would change nothing, which nobody would notice."""
    if kind == "csv":
        file = tmp_path / "flights.csv"
        file.write_text("\n".join([HEADER, *ROWS]), encoding="utf-8")
    elif kind == "gtfs":
        file = as_zip(FEED, tmp_path / "feed.zip")
    outcome = made(file, tmp_path / "made", *given)
    assert outcome.code == 2
    assert told in outcome.err
    assert not (tmp_path / "made").exists()


def test_a_folder_is_no_airline_schedule(tmp_path: Path) -> None:
    outcome = made(tmp_path, tmp_path / "made", "--format", "ssim")
    assert outcome.code == 2
    assert "is a folder, which only a GTFS feed can be" in outcome.err


def test_the_snapshot_of_a_new_folder_lies_before_every_departure(tmp_path: Path) -> None:
    file = tmp_path / "east.ssim"
    file.write_bytes(write(("ZQ", [Leg(departs=1, departs_variation=840, arrives_variation=840, arrives=100)])))
    assert made(file, tmp_path / "made").code == 0
    with_fares(tmp_path / "made")
    read = read_folder(tmp_path / "made")
    assert not [warning for warning in read.warnings if "has departed" in warning.problem]
    assert read.network.legs.departs[0].astype(object).date() == date(2027, 2, 28)
