"""The command, as it is typed."""

from __future__ import annotations

import hashlib
import html
import json
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet
import pytest

from network import read_folder, table_schema
from tests.commands import run
from tests.folders import Folder

DAYS = (60, 30, 14, 7, 3, 1, 0)
CLASSES = ("A", "B", "C")
PRODUCTS = [line.rsplit(",", 1)[0] for line in Folder().text("fares.csv").splitlines()[1:]]


def history(seed: int = 1) -> pd.DataFrame:
    """A history of the sound folder: every product on 60 days to the first of March, readings to 25 February."""
    rng = np.random.default_rng(seed)
    last = np.datetime64("2030-03-03")
    rows = []
    for product in PRODUCTS:
        itinerary, fare_class = product.split(",")
        share = np.array([0.05, 0.2, 0.4, 0.6, 0.8, 0.93, 1.0]) ** (1 + (fare_class == "A"))
        for departure in last - np.arange(60):
            came = np.cumsum(rng.poisson(3.0 * np.diff(share, prepend=0.0)))
            for days, booked in zip(DAYS, came, strict=True):
                if departure - days <= np.datetime64("2030-02-25"):
                    rows.append((str(departure), itinerary, fare_class, days, booked, True))
    return pd.DataFrame(rows, columns=["departure", "itinerary", "fare_class", "days_before", "booked", "open"])


@pytest.fixture(scope="module")
def table(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("history") / "history.csv"
    history().to_csv(path, index=False)
    return path


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return Folder().drop("demand.csv", "booking_curves.csv").write(tmp_path / "network")


def digest(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


def test_a_folder_without_demand_can_be_priced_afterwards(table: Path, folder: Path, tmp_path: Path) -> None:
    outcome = run("estimate", table, "--network", folder)
    assert outcome.code == 0, outcome.err
    assert outcome.err == ""
    network = read_folder(folder).network
    # Of three passengers a departure what is to come some days before it; all itineraries are alike.
    share = network.demand.mean / 3.0
    assert np.all((share > 0) & (share < 1))
    assert (
        network.demand.mean[network.product_class == 0].mean() > network.demand.mean[network.product_class == 1].mean()
    )
    assert len(network.curves) >= 3
    assert run("check", folder).code == 0
    assert run("price", folder, "--out", tmp_path / "priced").code == 0
    for name in ("Demand to come", "Tested on the past", "estimate.html", "demand.csv"):
        assert name in outcome.out


def test_the_same_input_gives_the_same_files(table: Path, folder: Path, tmp_path: Path) -> None:
    for name in ("one", "two"):
        assert run("estimate", table, "--network", folder, "--out", tmp_path / name).code == 0
    names = sorted(path.name for path in (tmp_path / "one").iterdir())
    assert names == ["booking_curves.csv", "demand.csv", "estimate.html", "estimate.json", "estimates.csv"]
    for name in names:
        assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "two" / name).read_bytes()


def test_files_fit_each_other_and_their_schemas(table: Path, folder: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    outcome = run("estimate", table, "--network", folder, "--out", out, "--format", "parquet", "--json")
    assert outcome.code == 0
    document = json.loads((out / "estimate.json").read_text(encoding="utf-8"))
    assert {name: digest(out / name) for name in document["files"]} == document["files"]
    assert document["inputs"] == {"history.csv": digest(table)}
    shown = json.loads(outcome.out)
    assert {key: shown[key] for key in document if key != "files"} == {
        key: document[key] for key in document if key != "files"
    }
    demand = pd.read_parquet(out / "demand.parquet")
    estimates = pd.read_parquet(out / "estimates.parquet")
    assert tuple(estimates.columns) == table_schema("legworth", "estimates").names
    for name in ("itinerary", "fare_class", "mean", "deviation", "curve"):
        assert estimates[name].tolist() == demand[name].tolist()
    ahead = estimates[estimates["days_left"] > 0]
    made = ahead["rate"] * ahead["effect"] * ahead["to_come"] * ahead["update"]
    np.testing.assert_allclose(made, ahead["estimated_mean"], rtol=1e-4)
    assert document["demand"]["to_come"] == pytest.approx(demand["mean"].sum(), rel=1e-5)
    assert document["backtest"]["every"]["forecasts"] > 500


def test_history_goes_by_the_names_that_itineraries_give(table: Path, tmp_path: Path) -> None:
    def named(frame: pd.DataFrame) -> pd.DataFrame:
        return frame.assign(history_name=frame["itinerary"], itinerary=frame["itinerary"] + "-0301")

    other = Folder().drop("demand.csv", "booking_curves.csv").frame("itineraries.csv", named)
    other = other.frame("fares.csv", lambda frame: frame.assign(itinerary=frame["itinerary"] + "-0301"))
    plain = Folder().drop("demand.csv", "booking_curves.csv").write(tmp_path / "plain")
    dated = other.write(tmp_path / "dated")
    for path in (plain, dated):
        assert run("estimate", table, "--network", path, "--backtest", "0").code == 0
    one, two = (pd.read_csv(path / "demand.csv") for path in (plain, dated))
    assert (one["itinerary"] + "-0301").tolist() == two["itinerary"].tolist()
    assert one["mean"].tolist() == two["mean"].tolist()


def test_what_people_wrote_is_kept_and_what_we_wrote_is_not(table: Path, tmp_path: Path) -> None:
    folder = Folder().write(tmp_path / "network")
    before = digest(folder / "demand.csv")
    arguments = ("estimate", table, "--network", folder, "--backtest", "0")
    assert run(*arguments).code == 0
    assert digest(folder / "demand.csv.before") == before
    assert digest(folder / "demand.csv") != before
    assert (folder / "booking_curves.csv.before").exists()
    assert run(*arguments, "--format", "parquet").code == 0
    assert digest(folder / "demand.csv.before") == before
    assert not (folder / "demand.csv").exists()
    assert not (folder / "demand.parquet.before").exists()
    assert run("check", folder).code == 0
    assert not list(folder.glob(".*"))


def test_nothing_that_people_wrote_is_lost_the_second_time(table: Path, tmp_path: Path) -> None:
    folder = Folder().write(tmp_path / "network")
    arguments = ("estimate", table, "--network", folder, "--backtest", "0")
    first = (folder / "demand.csv").read_text()
    by_hand = first.replace("2.5,1.6", "2.6,1.6")
    assert by_hand != first
    told = [run(*arguments).out]
    for text in (by_hand, first):
        (folder / "demand.csv").write_text(text)
        told.append(run(*arguments).out)
    kept = {path.name: path.read_text() for path in folder.glob("demand.csv.before*")}
    assert kept == {"demand.csv.before": first, "demand.csv.before2": by_hand}
    names = ("demand.csv.before", "demand.csv.before2", "demand.csv.before")
    for out, name in zip(told, names, strict=True):
        assert f"Kept what was there before: {folder / name}\n" in out


def test_what_history_does_not_tell_is_said(table: Path, folder: Path, tmp_path: Path) -> None:
    history = pd.read_csv(table) if table.suffix == ".csv" else pd.read_parquet(table)
    quiet = tmp_path / "quiet.csv"
    history.assign(booked=0).to_csv(quiet, index=False)
    told = run("estimate", quiet, "--network", folder, "--out", tmp_path / "out", "--backtest", "0").out
    assert "Nothing was booked in this history: 0 was written for every product" in told
    reading = history.groupby(["departure", "itinerary", "fare_class"]).cumcount()
    closed = history.assign(
        open=reading < 1, booked=history.groupby(["departure", "itinerary", "fare_class"]).booked.transform("first")
    )
    bare = tmp_path / "bare.csv"
    closed.drop(columns="open_share", errors="ignore").to_csv(bare, index=False)
    told = run("estimate", bare, "--network", folder, "--out", tmp_path / "out", "--backtest", "0").out
    assert "it is not known how long the class was open (no open_share)" in told


def test_adjustments_are_told_in_every_output(table: Path, folder: Path) -> None:
    (folder / "adjustments.csv").write_text(
        "adjustment,leg,fare_class,factor,who,when,why,until\n"
        "fair,L1,A,2,R. Stell,2030-02-20T10:00+01:00,A fair in <Norby>,\n"
        "strike,L1,,0.5,R. Stell,2030-02-20T10:00+01:00,A strike,2030-02-21T10:00+01:00\n",
        encoding="utf-8",
    )
    plain = run(
        "estimate", table, "--network", folder, "--out", folder / "plain", "--no-adjustments", "--backtest", "0"
    )
    assert plain.code == 0
    outcome = run("estimate", table, "--network", folder, "--backtest", "0")
    assert outcome.code == 0, outcome.err
    estimates = pd.read_csv(folder / "estimates.csv")
    touched = estimates["adjustments"] == "fair"
    paths = pd.read_csv(folder / "itineraries.csv").set_index("itinerary")["legs"]
    uses = estimates["itinerary"].map(paths).str.split().map(lambda legs: "L1" in legs)
    assert touched.equals(uses & (estimates["fare_class"] == "A"))
    np.testing.assert_allclose(estimates["mean"][touched], 2 * estimates["estimated_mean"][touched], rtol=1e-5)
    assert estimates["mean"][~touched].equals(estimates["estimated_mean"][~touched])
    assert estimates["estimated_mean"].equals(pd.read_csv(folder / "plain" / "estimates.csv")["mean"])
    document = json.loads((folder / "estimate.json").read_text(encoding="utf-8"))
    assert [(row["adjustment"], row["expired"]) for row in document["adjustments"]] == [
        ("fair", False),
        ("strike", True),
    ]
    assert document["adjustments"][0]["who"] == "R. Stell"
    assert set(document["inputs"]) == {"history.csv", "adjustments.csv"}
    page = (folder / "estimate.html").read_text(encoding="utf-8")
    assert "A fair in &lt;Norby&gt;" in page
    assert "<Norby>" not in page
    assert "Adjustment fair (leg L1, fare_class A, times 2) by R. Stell" in outcome.out
    assert "Adjustment strike (leg L1, times 0.5) expired" in outcome.out


def test_the_page_stands_by_itself(table: Path, folder: Path) -> None:
    assert run("estimate", table, "--network", folder).code == 0
    page = (folder / "estimate.html").read_text(encoding="utf-8")
    assert page.count("<picture>") == 6
    assert "<script" not in page
    addresses = re.findall(r"""(?:src|srcset|href)\s*=\s*["']([^"']*)""", page)
    assert len(addresses) > 10
    assert all(address.startswith(("#", "data:")) for address in addresses)
    assert "prefers-color-scheme: dark" in page
    assert "Tern Sound Ferries" in page


def test_faults_of_history_and_adjustments_are_told_together_and_nothing_is_written(
    folder: Path, tmp_path: Path
) -> None:
    frame = history()
    frame["booked"] = frame["booked"].astype(object)
    frame.loc[3, "booked"] = "many"
    frame.loc[5, "fare_class"] = "Q"
    frame.to_csv(tmp_path / "bad.csv", index=False)
    (folder / "adjustments.csv").write_text(
        "adjustment,leg,factor,who,when,why\nfair,L9,2,me,2030-02-20T10:00+01:00,fair\n", encoding="utf-8"
    )
    before = sorted(path.name for path in folder.iterdir())
    outcome = run("estimate", tmp_path / "bad.csv", "--network", folder)
    assert outcome.code == 2
    told = outcome.err.splitlines()
    assert told[0].startswith("adjustments.csv:2: leg: 'L9' is not a leg")
    assert told[1].startswith("bad.csv:5: booked: 'many' is not a whole number")
    assert told[2].startswith("bad.csv:7: fare_class: 'Q' (1 rows) is not a fare class")
    assert told[3] == "3 faults; nothing was computed or written"
    assert sorted(path.name for path in folder.iterdir()) == before


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--adjustments", "none.csv"], "there is no such file; name a table of adjustments"),
        (["--adjustments", "none.csv", "--no-adjustments"], "contradict each other"),
        (["--half-life", "0"], "0.0 is not in the range"),
        (["--half-life", "inf"], "'inf' is not a finite number"),
        (["--half-life", "30", "--no-ageing"], "contradict each other"),
        (["--closing", "perhaps"], "'perhaps' is not one of"),
    ],
)
def test_wrong_options_end_with_code_2(table: Path, folder: Path, arguments: list[str], message: str) -> None:
    outcome = run("estimate", table, "--network", folder, *arguments)
    assert outcome.code == 2
    assert message in outcome.err
    assert "Traceback" not in outcome.err
    assert not (folder / "demand.csv").exists()


def test_two_itineraries_of_one_history_on_one_date_are_a_fault(table: Path, tmp_path: Path) -> None:
    twins = Folder().frame("itineraries.csv", lambda frame: frame.assign(history_name="SAME")).write(tmp_path / "twins")
    outcome = run("estimate", table, "--network", twins)
    assert outcome.code == 2
    assert "history cannot tell them apart" in outcome.err


def test_history_of_others_alone_is_told(folder: Path, tmp_path: Path) -> None:
    frame = history().assign(itinerary="ELSEWHERE").drop_duplicates(["departure", "fare_class", "days_before"])
    frame.to_csv(tmp_path / "other.csv", index=False)
    outcome = run("estimate", tmp_path / "other.csv", "--network", folder)
    assert outcome.code == 2
    assert "'ELSEWHERE'" in outcome.err
    dropped = run("estimate", tmp_path / "other.csv", "--network", folder, "--unknown", "drop")
    assert dropped.code == 2
    assert "no reading" in dropped.err
    kept = run("estimate", tmp_path / "other.csv", "--network", folder, "--unknown", "keep", "--json")
    assert kept.code == 0
    document = json.loads(kept.out)
    assert document["demand"]["weak_products"] == document["demand"]["products"] > 0


def test_parquet_history_says_the_same(table: Path, folder: Path, tmp_path: Path) -> None:
    frame = pd.read_csv(table)
    pyarrow.parquet.write_table(
        pyarrow.Table.from_pandas(frame.assign(departure=pd.to_datetime(frame["departure"]).dt.date)),
        tmp_path / "history.parquet",
    )
    for name, path in (("csv", table), ("parquet", tmp_path / "history.parquet")):
        outcome = run("estimate", path, "--network", folder, "--out", tmp_path / name, "--backtest", "0")
        assert outcome.code == 0, outcome.err
    assert digest(tmp_path / "csv" / "demand.csv") == digest(tmp_path / "parquet" / "demand.csv")


def test_methods_are_the_plain_mean_where_no_class_closed(table: Path, folder: Path) -> None:
    """Of the departures before the snapshot, each by its age with the half-life of a year, worked out here."""
    outcome = run("estimate", table, "--network", folder, "--backtest", "0")
    assert outcome.code == 0
    assert "by other methods" not in outcome.out
    found = json.loads((folder / "estimate.json").read_text(encoding="utf-8"))["methods"]
    rows = pd.read_csv(table, parse_dates=["departure"])
    rows = rows[(rows["departure"] < "2030-02-25") & (rows["days_before"] == 0)]
    age = (pd.Timestamp("2030-02-25") - rows["departure"]).dt.days
    rows = rows.assign(weight=0.5 ** (age / 365.0))
    rows["weighed"] = rows["weight"] * rows["booked"]
    total = rows.groupby("fare_class")[["weighed", "weight"]].sum()
    assert found["departures"] == len(rows)
    assert found["closed_intervals"] == found["pooled_samples"] == found["left_out"] == 0
    assert [line["method"] for line in found["lines"]] == [
        "booked",
        "ignore",
        "discard",
        "replace",
        "projection",
        "normal",
        "poisson",
        "negative_binomial",
        "estimate",
    ]
    for line in found["lines"]:
        exact = 0.02 if line["method"] == "estimate" else 1e-12
        assert line["mean"] == pytest.approx(total["weighed"].sum() / total["weight"].sum(), rel=exact)
        for one in line["by_class"]:
            mine = total.loc[one["fare_class"]]
            assert one["mean"] == pytest.approx(mine["weighed"] / mine["weight"], rel=5 * exact)
            assert abs(one["above_bookings"]) <= 5 * exact


def closed_history() -> pd.DataFrame:
    """The history with class C closed from the reading at 14 days on where more than 2 had booked in all by then."""
    frame = history(2)
    keys = ["departure", "itinerary", "days_before"]
    by_then = frame[frame["days_before"] == 30].groupby(["departure", "itinerary"])["booked"].sum()
    busy = pd.MultiIndex.from_frame(frame[["departure", "itinerary"]]).map(by_then).to_numpy() > 2
    shut = busy & (frame["fare_class"] == "C").to_numpy() & (frame["days_before"] <= 14).to_numpy()
    early = frame[frame["days_before"] == 30].set_index([*keys[:2], "fare_class"])["booked"]
    at = pd.MultiIndex.from_frame(frame[[*keys[:2], "fare_class"]])
    booked = np.where(shut, early.reindex(at).to_numpy(), frame["booked"])
    return frame.assign(booked=booked.astype(int), open=~shut)


def test_methods_say_the_same_of_every_format_and_stand_in_all_three_places(folder: Path, tmp_path: Path) -> None:
    frame = closed_history()
    frame.to_csv(tmp_path / "history.csv", index=False)
    pyarrow.parquet.write_table(
        pyarrow.Table.from_pandas(frame.assign(departure=pd.to_datetime(frame["departure"]).dt.date)),
        tmp_path / "history.parquet",
    )
    told = {}
    for ending in ("csv", "parquet"):
        arguments = (tmp_path / f"history.{ending}", "--network", folder, "--out", tmp_path / ending)
        outcome = run("estimate", *arguments, "--backtest", "0", "--methods")
        assert outcome.code == 0, outcome.err
        told[ending] = json.loads((tmp_path / ending / "estimate.json").read_text(encoding="utf-8"))["methods"]
    assert told["csv"] == told["parquet"]
    found = told["csv"]
    assert found["closed_intervals"] > 100
    lines = {line["method"]: line for line in found["lines"]}
    for at, name in enumerate(CLASSES):
        above = {method: line["by_class"][at]["above_bookings"] for method, line in lines.items()}
        assert (above["poisson"] > 0.05) == (name == "C")
        assert (above["estimate"] > 0.05) == (name == "C")
        assert above["ignore"] == pytest.approx(0.0, abs=1e-12)
    page = (tmp_path / "csv" / "estimate.html").read_text(encoding="utf-8")
    assert "The same history by other methods" in outcome.out
    for note in found["notes"]:
        assert note in outcome.out
        assert html.escape(note) in page
    for method in ("poisson", "estimate"):
        figure = f"{lines[method]['mean']:.2f}"
        assert f"{figure} ┃" in outcome.out or f"{figure} │" in outcome.out
        assert f"<td>{figure}</td>" in page


def test_methods_have_no_figure_of_a_class_that_was_never_open(folder: Path, tmp_path: Path) -> None:
    frame = history()
    shut = frame["fare_class"] == "C"
    frame = frame.assign(booked=frame["booked"].where(~shut, 0), open=~shut)
    frame.to_csv(tmp_path / "history.csv", index=False)
    outcome = run("estimate", tmp_path / "history.csv", "--network", folder, "--backtest", "0", "--methods")
    assert outcome.code == 0, outcome.err
    found = json.loads((folder / "estimate.json").read_text(encoding="utf-8"))["methods"]
    assert found["never_open"] == ["C"]
    for line in found["lines"]:
        kept = line["method"] in ("booked", "estimate")
        assert line["by_class"][2] == {"fare_class": "C", "mean": 0.0 if kept else None, "above_bookings": None}
        assert line["mean"] > 2.0
    assert "Class C was closed" in outcome.out
    assert "NaN" not in (folder / "estimate.html").read_text(encoding="utf-8")
    assert "nan" not in outcome.out


def test_without_ageing_all_departures_count_alike(table: Path, folder: Path) -> None:
    outcome = run("estimate", table, "--network", folder, "--backtest", "0", "--no-ageing")
    assert outcome.code == 0, outcome.err
    document = json.loads((folder / "estimate.json").read_text(encoding="utf-8"))
    rows = pd.read_csv(table, parse_dates=["departure"])
    rows = rows[(rows["departure"] < "2030-02-25") & (rows["days_before"] == 0)]
    assert document["settings"]["half_life"] is None
    assert document["methods"]["half_life"] is None
    assert document["methods"]["lines"][0]["mean"] == pytest.approx(rows["booked"].mean(), rel=1e-12)
