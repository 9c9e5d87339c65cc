"""The commands on sound folders: what they print, what they write, and what they leave alone."""

from __future__ import annotations

import json
import re
from pathlib import Path

import matplotlib.image
import numpy as np
import pandas as pd
import pytest

from legworth.pricing import price_folder
from legworth.results import result_schemas
from network import read_folder
from tests.commands import run
from tests.folders import Folder

ROOT = Path(__file__).parents[2]
DEMO = ROOT / "demo_network"
WRITTEN = ("bid_prices", "protection", "comparison", "connections")
FILES = {*(f"{name}.csv" for name in WRITTEN), "summary.json"}


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return Folder().write(tmp_path / "folder")


@pytest.fixture(scope="module")
def demo_out(tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("demo") / "out"
    outcome = run("price", DEMO, "--out", out)
    assert (outcome.code, outcome.err) == (0, "")
    return out


def table(path: Path) -> pd.DataFrame:
    """A written table, every figure by Python's own float()."""
    texts = pd.read_csv(path, dtype=str, keep_default_na=False)
    schema = result_schemas()[path.stem]
    answer = {}
    for column in schema:
        values = texts[column.name]
        if column.numeric:
            answer[column.name] = values.map(float if column.type == "number" else int)
        elif column.type == "boolean":
            answer[column.name] = values.map({"true": True, "false": False})
        else:
            answer[column.name] = values
    return pd.DataFrame(answer)


def without_seconds(path: Path) -> str:
    document = json.loads(path.read_text(encoding="utf-8"))
    for part in (document, *document["components"]):
        assert part.pop("seconds")
    return json.dumps(document)


def test_check_counts_what_the_tables_hold(folder: Path) -> None:
    outcome = run("check", folder, "--json")
    document = json.loads(outcome.out)
    rows = {name: len(pd.read_csv(folder / f"{name}.csv")) for name in ("stations", "legs", "itineraries", "fares")}
    rows["products"] = rows.pop("fares")
    legs = pd.read_csv(folder / "legs.csv")
    assert (outcome.code, outcome.err) == (0, "")
    assert {name: document[name] for name in rows} == rows
    assert document["remaining_seats"] == int((legs["capacity"] - legs["sold"]).sum())
    assert (document["ok"], document["faults"], document["components"]) == (True, [], 3)
    assert document["currency"] == "EUR"


def test_check_prints_warnings_and_sizes(folder: Path) -> None:
    Folder().cell("legs.csv", 4, "sold", "17").write(folder)
    outcome = run("check", folder)
    first, *_, last = outcome.out.splitlines()
    assert (outcome.code, outcome.err) == (0, "")
    assert first.startswith("legs.csv:4: sold: warning: ")
    assert "Tern Sound Ferries" in outcome.out
    assert last.endswith("1 warning, no faults")
    assert json.loads(run("check", folder, "--json").out)["faults"][0]["warning"] is True


@pytest.mark.parametrize("name", WRITTEN)
def test_price_writes_the_columns_declared(name: str, demo_out: Path) -> None:
    assert {path.name for path in demo_out.iterdir()} == FILES
    found = table(demo_out / f"{name}.csv")
    schema = result_schemas()[name]
    assert tuple(found.columns) == schema.names
    assert not found.duplicated(list(schema.key)).any()
    for column in schema:
        if column.numeric:
            assert np.isfinite(found[column.name]).all()
        if column.minimum is not None:
            assert (found[column.name] >= column.minimum).all()


def test_price_writes_a_row_for_every_leg_and_product(demo_out: Path) -> None:
    network = read_folder(DEMO).network
    for name in ("bid_prices", "comparison"):
        assert table(demo_out / f"{name}.csv")["leg"].tolist() == network.legs.name.tolist()
    connections = table(demo_out / "connections.csv")
    assert connections["itinerary"].tolist() == network.itinerary[network.product_itinerary].tolist()
    assert len(table(demo_out / "protection.csv")) == int(network.leg_load(np.ones(network.n_products)).sum())


def test_the_summary_is_certified_and_agrees_with_the_tables(demo_out: Path) -> None:
    summary = json.loads((demo_out / "summary.json").read_text(encoding="utf-8"))
    prices, connections = table(demo_out / "bid_prices.csv"), table(demo_out / "connections.csv")
    assert summary["certified"] is True
    assert all(part["certificate"]["holds"] for part in summary["components"])
    assert sum(part["legs"] for part in summary["components"]) == len(prices)
    assert sum(part["products"] for part in summary["components"]) == len(connections)
    assert summary["legs_with_price"] == int((prices["bid_price"] > 0).sum())
    assert summary["objective"] <= summary["bounds"]["revenue"] * (1 + 1e-9)
    assert summary["at_stake"] == pytest.approx(connections["at_stake"].sum())
    disagreeing = (connections["disagreement"] != "").sum()
    assert summary["products_where_controls_disagree"] == disagreeing
    assert (connections["open"] != connections["open_by_leg_control"]).sum() == disagreeing


@pytest.mark.parametrize("form", ["csv", "parquet"])
def test_written_figures_are_those_computed(form: str, folder: Path, tmp_path: Path) -> None:
    priced = price_folder(folder)
    assert run("price", folder, "--out", tmp_path / "out", "--format", form).code == 0
    for name, frame in priced.tables.items():
        path = tmp_path / "out" / f"{name}.{form}"
        found = table(path) if form == "csv" else pd.read_parquet(path)
        for column in frame.columns:
            expected = frame[column].astype("object").where(frame[column].notna(), "" if form == "csv" else None)
            got = found[column].astype("object").where(found[column].notna(), None)
            assert got.tolist() == expected.tolist(), column


def test_names_with_commas_and_quotes_come_back(folder: Path, tmp_path: Path) -> None:
    names = {"L1": 'L"1"', "L2": "L,2", "L5": "'é'"}
    for file in ("legs.csv", "itineraries.csv"):
        frame = Folder().table(file)
        frame = frame.map(lambda value: " ".join(names.get(word, word) for word in value.split(" ")))
        frame.to_csv(folder / file, index=False)
    assert run("price", folder, "--out", tmp_path / "out").code == 0
    assert table(tmp_path / "out" / "bid_prices.csv")["leg"].tolist() == ['L"1"', "L,2", "L3", "L4", "'é'"]


def test_two_runs_give_the_same_bytes_apart_from_seconds(folder: Path, tmp_path: Path) -> None:
    outs = [tmp_path / "first", tmp_path / "second"]
    for out in outs:
        assert run("price", folder, "--out", out).code == 0
    for name in FILES - {"summary.json"}:
        assert (outs[0] / name).read_bytes() == (outs[1] / name).read_bytes()
    assert without_seconds(outs[0] / "summary.json") == without_seconds(outs[1] / "summary.json")


def test_json_is_the_summary(folder: Path, tmp_path: Path) -> None:
    outcome = run("price", folder, "--out", tmp_path / "out", "--json")
    assert (outcome.code, outcome.err) == (0, "")
    assert json.loads(outcome.out) == json.loads((tmp_path / "out" / "summary.json").read_text(encoding="utf-8"))


def test_another_format_replaces_the_tables_and_nothing_else(folder: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    (out / "notes.txt").write_text("mine")
    for form in ("csv", "parquet"):
        assert run("price", folder, "--out", out, "--format", form).code == 0
    assert {path.name for path in out.iterdir()} == {
        "notes.txt", *(name.replace(".csv", ".parquet") for name in FILES)
    }  # fmt: skip
    assert sorted(path.name for path in tmp_path.iterdir()) == ["folder", "out"]


def test_the_default_out_is_a_folder_beside_the_caller(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(folder.parent)
    assert run("price", folder).code == 0
    assert {path.name for path in (folder.parent / "priced").iterdir()} == FILES
    assert run("price", folder, "--out", ".").code == 0
    assert {path.name for path in folder.parent.iterdir()} == FILES | {"folder", "priced"}


@pytest.mark.parametrize("method", ["deterministic", "randomised"])
@pytest.mark.parametrize("solver", ["cbc", "highs"])
def test_methods_and_solvers_are_taken(method: str, solver: str, folder: Path, tmp_path: Path) -> None:
    options = ["--method", method, "--solver", solver, "--samples", "3", "--virtual-classes", "2"]
    document = json.loads(run("price", folder, "--out", tmp_path / "out", "--json", *options).out)
    assert (document["method"], document["settings"]["solver"]) == (method, solver)
    assert document["settings"]["samples"] == (3 if method == "randomised" else None)
    assert document["settings"]["virtual_classes"] == 2


def test_compare_draws_a_picture_and_lists_disagreements(folder: Path, tmp_path: Path) -> None:
    picture = tmp_path / "deep" / "comparison.png"
    outcome = run("compare", folder, "--picture", picture, "--json", "--top", "2")
    document = json.loads(outcome.out)
    assert (outcome.code, outcome.err) == (0, "")
    assert document["picture"] == str(picture)
    stakes = [row["at_stake"] for row in document["disagreements"]]
    assert 0 < len(stakes) <= 2
    assert stakes == sorted(stakes, reverse=True)
    assert picture.read_bytes()[:8] == b"\x89PNG\r\n\x1a\n", "PNG signature, ISO/IEC 15948, 5.2"
    height, width, channels = matplotlib.image.imread(picture).shape
    assert height > 300
    assert width > height
    assert channels in (3, 4)
    assert [path.name for path in picture.parent.iterdir()] == ["comparison.png"]


def test_compare_prints_the_same_disagreements(folder: Path, tmp_path: Path) -> None:
    arguments = ["compare", folder, "--picture", tmp_path / "x.png"]
    rows = json.loads(run(*arguments, "--json").out)["disagreements"]
    text = run(*arguments).out
    assert rows
    for row in rows:
        assert any(row["itinerary"] in line and f"{row['fare']:,.2f}" in line for line in text.splitlines())


def test_compare_of_the_demo(tmp_path: Path) -> None:
    outcome = run("compare", DEMO, "--picture", tmp_path / "x.png")
    assert (outcome.code, outcome.err) == (0, "")
    assert "Vendamar Isles Link" in outcome.out
    assert (tmp_path / "x.png").stat().st_size > 10_000


def test_names_are_printed_as_they_are_written(folder: Path, tmp_path: Path) -> None:
    """Square brackets and colons mean something to the library that prints."""
    name = "[bold]Tern[/] :ship: [/nothing]"
    Folder().replace("network.toml", "Tern Sound", name).write(folder)
    for file in ("legs.csv", "itineraries.csv"):
        text = (folder / file).read_text(encoding="utf-8")
        (folder / file).write_text(text.replace("L5", "[L5]:cat:"), encoding="utf-8")
    outcome = run("price", folder, "--out", tmp_path / "out")
    assert (outcome.code, outcome.err) == (0, "")
    assert name in outcome.out
    assert "[L5]:cat:" in outcome.out


def test_departed_legs_are_counted_apart_and_not_among_the_dearest(folder: Path, tmp_path: Path) -> None:
    """They have no seats for sale, so no last seat either."""
    Folder().replace("network.toml", "2030-02-25T02:30", "2030-03-02T02:30").write(folder)
    outcome = run("price", folder, "--out", tmp_path / "out")
    summary = json.loads((tmp_path / "out" / "summary.json").read_text(encoding="utf-8"))
    assert (summary["legs_departed"], summary["legs_with_price"], summary["legs_without_seats"]) == (3, 2, 0)
    assert "2 of 2" in outcome.out
    assert "0 without seats, and 3 departed" in outcome.out
    rows = outcome.out.partition("The dearest last seats")[2]
    assert [leg for leg in ("L1", "L2", "L3", "L4", "L5") if f" {leg} " in rows] == ["L4", "L5"]


def test_a_folder_of_departed_legs_alone_is_warned_of(folder: Path, tmp_path: Path) -> None:
    Folder().replace("network.toml", "2030-02-25T02:30", "2030-03-05T02:30").write(folder)
    outcome = run("price", folder, "--out", tmp_path / "out")
    assert outcome.code == 0
    assert outcome.out.startswith("network.toml:3: as_of: warning: every leg of legs.csv (5) has departed")
    assert "0 of 0" in outcome.out
    assert "dearest" not in outcome.out


def test_one_of_everything_is_said_in_the_singular(folder: Path, tmp_path: Path) -> None:
    """One leg, one itinerary, one product and one seat."""
    only = Folder().line("legs.csv", 2, "L1,NOR,HUB,2030-03-01T06:00+01:00,2030-03-01T07:30+01:00,24,23")
    for file, rows in (("legs.csv", 2), ("itineraries.csv", 2), ("fares.csv", 2), ("demand.csv", 2)):
        only.mutate(file, lambda text, rows=rows: "".join(text.splitlines(keepends=True)[:rows]))
    only.cell("demand.csv", 2, "mean", "1").cell("demand.csv", 2, "deviation", "1").write(folder)
    out = tmp_path / "out"
    runs = [
        ("check", folder),
        ("price", folder, "--out", out, "--curves", "decomposition"),
        ("compare", folder, "--picture", tmp_path / "x.png"),
        ("decide", folder, "--prices", out, "--itinerary", "NOR-HUB", "--fare-class", "A"),
        ("connection", folder, "--itinerary", "NOR-HUB", "--party", "1"),
        ("change", folder, "--seats", "L1=-1"),
        ("change", folder, "--cancel", "L1"),
        ("change", folder, "--seats", "L1=-2"),
        ("check", tmp_path),
    ]
    nouns = "legs|components|itineraries|products|seats|passengers|faults|warnings|disagreements|parties|curves"
    for arguments in runs:
        outcome = run(*arguments)
        assert outcome.out + outcome.err
        assert not re.findall(rf"(?<![\w.,:-])1 (?:{nouns})\b", outcome.out + outcome.err), arguments
    assert "1 leg in 1 component, 1 itinerary, 1 product; 1 seat to sell" in run("check", folder).out
    assert "1 passenger expected to ask; 2 warnings" in run("check", folder).out
