"""The commands of ``legworth nights``, as they are typed."""

from __future__ import annotations

import csv
import io
import json
from datetime import UTC, datetime
from pathlib import Path

import pytest

from legworth.store import Check, Forced, Store
from tests.commands import Outcome, run
from tests.folders import Folder
from tests.legworth.store.small_nights import FIRST, PARTS, fill, manifest_of, publish, publish_priced


@pytest.fixture
def store(tmp_path: Path) -> Store:
    store = Store.open(tmp_path / "store", create=True)
    first = publish_priced(store, day=3)
    publish_priced(store, day=4, factor=1.5, leave_out=("2030-03-01", "2030-03-03"))
    assert first.number == 1
    return store


def nights(store: Store, *arguments: str) -> Outcome:
    return run("nights", "--store", store.path, *arguments)


def test_list_shows_every_night_and_which_is_in_force(store: Store) -> None:
    found = nights(store, "list")
    assert found.code == 0
    lines = [line for line in found.out.splitlines() if "2030-" in line]
    assert len(lines) == 2
    assert "00001-2030-02-28" in lines[0]
    assert "yes" in lines[1]
    assert "yes" not in lines[0]
    document = json.loads(nights(store, "list", "--json").out)
    assert document["in_force"] == "00002-2030-03-01"
    assert [night["legs"] for night in document["nights"]] == [5, 1]
    (store.path / "nights" / "night=00002-2030-03-01" / "manifest.json").write_text("{")
    damaged = nights(store, "list")
    assert damaged.code == 0
    assert "is damaged" in damaged.err
    assert "00002-2030-03-01 is damaged: " in damaged.out
    assert json.loads(nights(store, "list", "--json").out)["in_force"] is None


def test_list_says_which_nights_a_check_stopped_and_where_to_look(store: Store) -> None:
    assert "stopped" not in nights(store, "list").out
    for day in (5, 6):
        with store.begin(datetime(2030, 3, day, tzinfo=UTC)) as aside:
            path = aside.stop({"reasons": ["odd prices"]})
    out = nights(store, "list").out
    assert f"00004-2030-03-06 was stopped by a check and not published: odd prices; read {path}\n" in out
    document = json.loads(nights(store, "list", "--json").out)
    assert [night["file"] for night in document["stopped"]] == [str(path.with_name("00003-2030-03-05.json")), str(path)]
    assert document["stopped"][0]["reasons"] == ["odd prices"]
    shown = nights(store, "show", "00003-2030-03-05")
    assert shown.code == 2
    assert f"was stopped by a check and not published (odd prices); read {path.parent}" in shown.err


def test_show_has_checks_in_words_and_says_which_were_not_made(store: Store) -> None:
    checks = (
        Check(name="no_demand", limit=0.3, found=0.125, passed=True),
        Check(name="missing", limit=None, found=None, passed=True),
        Check(name="snapshot", limit=0.0, found=24.0, passed=False, look_at=("as_of is old",)),
    )
    publish(store, 1.0, day=5, checks=checks)
    lines = nights(store, "show").out.splitlines()
    for title, *cells in (
        ("legs without demand to come", "12.5 %", "30 %", "held"),
        ("departures of last night missing tonight", "not compared"),
        ("snapshot older than last night's", "24 h", "0 h", "FAILED", "as_of is old"),
    ):
        line = next(line for line in lines if title in line)
        assert [cell for cell in cells if cell in line] == cells


def test_show_tells_what_a_night_holds_and_what_became_of_it(store: Store) -> None:
    publish(
        store,
        1.0,
        day=5,
        checks=(Check(name="bid prices moved", limit=0.2, found=0.5, passed=False, look_at=("L1", "L2")),),
        forced=Forced(who="night desk", reason="new timetable"),
    )
    found = nights(store, "show")
    assert found.code == 0
    for text in (
        "Night 00003-2030-03-02, in force",
        "6 legs",
        "bid prices moved",
        "L1; L2",
        "force by night desk: new",
    ):
        assert text in found.out
    document = json.loads(nights(store, "show", "00001-2030-02-28", "--json").out)
    assert document["in_force"] is False
    assert document["manifest"]["rows"]["legs"] == 5
    assert [entry["event"] for entry in document["history"]] == ["publish"]


def test_compare_shows_moves_legs_and_revenue_like_for_like(store: Store) -> None:
    document = json.loads(nights(store, "compare", "00001-2030-02-28", "--json").out)
    assert document["legs_in_both"] == document["legs_moved"] == 1
    assert document["moved"][0]["leg"] == "L4"
    assert document["moved"][0]["after"] == pytest.approx(1.5 * document["moved"][0]["before"])
    assert document["currency"] is None, "these nights do not say"
    assert document["departed"] == [], "no leg leaves before the snapshot of 2030-03-01T02:30Z"
    assert document["gone"] == ["L1", "L2", "L3", "L5"]
    assert (document["revenue_before"], document["revenue_after"]) == (1000.0, 1500.0)
    back = json.loads(nights(store, "compare", "00002-2030-03-01", "00001-2030-02-28", "--json").out)
    assert back["added"] == ["L1", "L2", "L3", "L5"]
    publish_priced(store, day=5, leave_out=("2030-03-01",))
    found = nights(store, "compare", "00001-2030-02-28", "--top", "1")
    assert found.code == 0
    assert "3 legs departed by the later snapshot: L1, L2, L3" in found.out
    assert "0 of 2 legs that both have and that were still to depart changed their bid price" in found.out
    assert "Revenue to come on the 2 parts that both have: 2,000 then, 2,000 now, +0" in found.out


def test_a_leg_that_departed_meanwhile_is_no_move(store: Store) -> None:
    publish_priced(store, day=5, factor=3.0)
    document = json.loads(nights(store, "compare", "00001-2030-02-28", "--json").out)
    assert document["departed"] == ["L1", "L2", "L3"], "the snapshot is of 2030-03-02T02:30Z, and both nights have them"
    assert [move["leg"] for move in document["moved"]] in (["L4", "L5"], ["L5", "L4"])
    assert document["legs_in_both"] == 2
    assert document["gone"] == document["added"] == []
    back = json.loads(nights(store, "compare", "00003-2030-03-02", "00001-2030-02-28", "--json").out)
    assert (back["departed"], back["legs_moved"]) == (document["departed"], 2)
    shown = nights(store, "compare", "00001-2030-02-28").out
    assert "3 legs departed by the later snapshot: L1, L2, L3" in shown
    assert "The 2 greatest moves" in shown


def test_money_is_in_the_currency_of_the_night(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    older = publish(store, 1.0)
    assert older.currency is None
    new, later = (publish(store, price, currency="SEK", network="Coaches") for price in (2.0, 3.0))
    other = publish(store, 2.0, currency="NOK")
    assert "Revenue to come  200 SEK, by" in nights(store, "show", new.name).out
    compared = nights(store, "compare", new.name, later.name).out
    assert "200 SEK then, 200 SEK now, +0" in compared
    assert "moves (SEK a seat)" in compared
    assert json.loads(nights(store, "compare", older.name, later.name, "--json").out)["currency"] == "SEK"
    refused = nights(store, "compare", new.name, other.name)
    assert refused.code == 2
    assert f"{new.name} is priced in SEK and {other.name} in NOK; name two nights of one currency" in refused.err
    document = json.loads(nights(store, "list", "--json").out)
    assert [night["currency"] for night in document["nights"]] == [None, "SEK", "SEK", "NOK"]
    assert "Nights (revenue in NOK, SEK)" in nights(store, "list").out


def test_the_currency_of_an_older_night_is_that_of_its_summaries(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    with store.begin(FIRST) as aside:
        fill(aside, 1.0)
        aside.write(f"part={PARTS[0]}/summary.json", b"[]")
        aside.write(f"part={PARTS[1]}/summary.json", b'{"currency": "GBP"}')
        night = aside.publish(manifest_of(aside, FIRST))
    assert night.manifest.currency is None
    assert night.currency == "GBP"


def test_restore_needs_a_reason_and_says_who(store: Store) -> None:
    assert nights(store, "restore", "00001-2030-02-28").code == 2
    assert nights(store, "restore", "00001-2030-02-28", "--reason", " ").code == 2
    done = nights(store, "restore", "00001-2030-02-28", "--reason", "old demand")
    assert (done.code, done.out) == (0, "Night 00001-2030-02-28 is in force.\n")
    assert "restore by " in nights(store, "show").out
    again = json.loads(nights(store, "restore", "00002-2030-03-01", "--reason", "right again", "--json").out)
    assert again["in_force"] == "00002-2030-03-01"


def test_query_prints_a_table_csv_or_json(store: Store) -> None:
    ask = "SELECT leg, bid_price, remaining FROM bid_prices WHERE night = '00001-2030-02-28' ORDER BY leg"
    shown = nights(store, "query", ask, "--rows", "2")
    assert "L1" in shown.out
    assert "and 3 more rows" in shown.out
    rows = list(csv.DictReader(io.StringIO(nights(store, "query", ask, "--format", "csv").out)))
    assert [row["leg"] for row in rows] == ["L1", "L2", "L3", "L4", "L5"]
    document = json.loads(nights(store, "query", ask, "--json").out)
    assert [float(row["bid_price"]) for row in rows] == [row["bid_price"] for row in document["rows"]]
    whole = "SELECT NULL AS nothing, 1.5 AS price, TIMESTAMPTZ '2030-01-01 00:00:00+00' AS at, ['nan'::DOUBLE] AS odd"
    assert nights(store, "query", whole).code == 0
    assert json.loads(nights(store, "query", whole, "--json").out)["rows"][0]["odd"] == [None]
    refused = nights(store, "query", "DELETE FROM nights", "--json")
    assert refused.code == 2
    assert json.loads(refused.out)["ok"] is False


def test_verify_ends_with_2_where_anything_is_damaged(store: Store) -> None:
    sound = nights(store, "verify")
    assert (sound.code, sound.out) == (0, "2 nights verified, 0 damaged\n")
    path = store.nights()[0].folder / "part=2030-03-01" / "legs.parquet"
    path.write_bytes(path.read_bytes()[:-1] + b"?")
    damaged = nights(store, "verify")
    assert damaged.code == 2
    assert "00001-2030-02-28: part=2030-03-01/legs.parquet has been changed" in damaged.out
    document = json.loads(nights(store, "verify", "--json").out)
    assert document["ok"] is False
    assert len(document["nights"]["00001-2030-02-28"]) == 1
    assert nights(store, "verify", "00002-2030-03-01").code == 0
    only = nights(store, "verify", "00001-2030-02-28")
    assert only.out.endswith("1 night verified, 1 damaged\n")


@pytest.mark.parametrize("mark", ["?", None])
def test_verify_gives_the_verdict_of_all_nights_before_the_fault_of_in_force(store: Store, mark: str | None) -> None:
    path = store.nights()[0].folder / "part=2030-03-01" / "legs.parquet"
    path.write_bytes(path.read_bytes()[:-1] + b"?")
    (store.path / "in_force").unlink()
    why = "no night is in force in"
    if mark is not None:
        (store.path / "in_force").write_text(mark)
        why = "in_force is damaged; see what is sound with"
    found = nights(store, "verify")
    assert found.code == 2
    assert "00001-2030-02-28: part=2030-03-01/legs.parquet has been changed" in found.out
    assert found.out.endswith("2 nights verified, 1 damaged\n")
    assert why in found.err
    assert "legworth nights" in found.err
    document = json.loads(nights(store, "verify", "--json").out)
    assert document["ok"] is False
    assert document["nights"]["00002-2030-03-01"] == []
    assert why in document["in_force_fault"]
    sound = store.nights()[1]
    assert nights(store, "restore", sound.name, "--reason", "in_force was lost").code == 0
    assert json.loads(nights(store, "verify", "--json").out)["in_force_fault"] is None


def test_hand_over_is_valid_from_the_instant_of_publication_or_restoring(store: Store, tmp_path: Path) -> None:
    folder = tmp_path / "prices"
    done = nights(store, "hand-over", "--to", str(folder))
    assert done.code == 0
    curves = store.nights()[1].manifest.rows["price_curves"]
    assert f": bid prices of 1 leg and {curves:,} rows of price curves written to {folder}, valid from " in done.out
    note = json.loads((folder / "hand_over.json").read_text())
    assert note["night"] == "00002-2030-03-01"
    assert note["valid_from"][:16] == store.history()[-1].at.isoformat()[:16]
    store.restore("00001-2030-02-28", "desk", "why not")
    document = json.loads(
        nights(
            store, "hand-over", "--to", str(folder), "--valid-from", "2030-03-01T06:00+01:00", "--by-part", "--json"
        ).out
    )
    assert document["rows"]["bid_prices"] == 5
    assert json.loads((folder / "hand_over.json").read_text())["valid_from"] == "2030-03-01T05:00:00Z"
    assert (folder / "price_curves" / "2030-03-01.csv").exists()
    for wrong in ("tomorrow", "2030-03-01T06:00"):
        refused = nights(store, "hand-over", "--to", str(folder), "--valid-from", wrong)
        assert refused.code == 2
        assert "write it as" in refused.err


@pytest.mark.parametrize(
    "arguments",
    [
        ("list",),
        ("show",),
        ("compare", "x"),
        ("query", "SELECT 1"),
        ("verify",),
        ("thin", "--newest", "1", "--weeks", "0", "--months", "0"),
        ("hand-over", "--to", "x"),
    ],
)
def test_a_store_must_be_named_and_be_one(tmp_path: Path, arguments: tuple[str, ...]) -> None:
    unnamed = run("nights", *arguments)
    assert unnamed.code == 2
    assert "name the store" in unnamed.err
    wrong = run("nights", "--store", tmp_path / "nowhere", *arguments)
    assert wrong.code == 2
    assert "is no store of nights" in wrong.err
    assert not (tmp_path / "nowhere").exists()


def test_an_empty_store_has_no_night_in_force(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    assert nights(store, "list").code == 0
    shown = nights(store, "show")
    assert shown.code == 2
    assert "no night is in force" in shown.err
    same = publish(store, 1.0)
    refused = nights(store, "compare", same.name, same.name)
    assert refused.code == 2
    assert "is given twice" in refused.err
    assert set(store.nights()[0].parts()) == set(PARTS)


@pytest.mark.parametrize("command", [("show",), ("hand-over", "--to", "prices"), ("compare", "00001-2030-02-28")])
def test_where_in_force_is_missing_the_way_back_is_told(
    store: Store, command: tuple[str, ...], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    store.restore("00001-2030-02-28", "desk", "last in force")
    (store.path / "in_force").unlink()
    told = f"legworth nights --store {store.path} restore"
    assert f"put the one last in force back with `{told} 00001-2030-02-28 --reason WHY`" in nights(store, *command).err
    (store.nights()[0].folder / "part=2030-03-01" / "legs.parquet").unlink()
    refused = nights(store, *command)
    assert refused.code == 2
    assert f"put the newest sound one back with `{told} 00002-2030-03-01 --reason WHY`" in refused.err
    (store.nights()[1].folder / "manifest.json").unlink()
    assert "none of them is sound; restore one from a backup" in nights(store, *command).err
    assert not (tmp_path / "prices").exists()


def test_a_query_says_which_damaged_nights_it_leaves_out(store: Store) -> None:
    (store.nights()[0].folder / "manifest.json").write_text("{")
    found = nights(store, "query", "SELECT count(*) AS n FROM bid_prices", "--json")
    assert json.loads(found.out)["rows"] == [{"n": 1}]
    assert "night 00001-2030-02-28 is damaged and left out: " in found.err


def test_thin_only_looks_until_it_is_told_to_remove(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    names = [publish(store, float(day), day=day).name for day in range(5)]
    folder = Folder().mutate("network.toml", lambda text: f"{text}\n[store]\nkeep_newest = 3\nkeep_weeks = 0\n")
    place = folder.write(tmp_path / "folder")
    seen = nights(store, "thin", str(place), "--months", "0")
    assert seen.code == 0
    assert "2 nights would go" in seen.out
    assert "Nothing has been removed" in seen.out
    rows = [line for line in seen.out.splitlines() if "2030-" in line]
    assert [("yes" in row, "no " in row) for row in rows] == [(False, True)] * 2 + [(True, False)] * 3
    assert "in force" in rows[-1]
    plan = json.loads(nights(store, "thin", str(place), "--months", "0", "--json").out)
    assert plan["rule"] == {"keep_newest": 3, "keep_weeks": 0, "keep_months": 0}
    assert plan["would_remove"] == names[:2]
    assert [night.name for night in store.nights()] == names
    kept = json.loads(nights(store, "thin", str(place), "--json").out)["kept"]
    assert kept[names[0]] == "the first of its month", "what is not given is as in the network folder"
    room = sum(path.stat().st_size for name in names[:2] for path in store.night(name).folder.rglob("*.*"))
    done = json.loads(nights(store, "thin", str(place), "--months", "0", "--remove", "--json").out)
    assert (done["removed"], done["freed_bytes"]) == (names[:2], room)
    assert [night.name for night in store.nights()] == names[2:]
    thinned = [entry for entry in store.history() if entry.event == "thin"]
    assert [entry.night for entry in thinned] == names[:2]
    assert thinned[0].reason is not None
    assert thinned[0].reason.startswith("by hand, keeping the newest 3, and of those before them")
    assert "0 nights would go" in nights(store, "thin", "--newest", "3", "--weeks", "0", "--months", "0").out


def test_thin_asks_for_a_whole_rule_and_honours_the_lock(store: Store, tmp_path: Path) -> None:
    unsaid = nights(store, "thin", "--newest", "3")
    assert unsaid.code == 2
    assert "name the network folder" in unsaid.err
    absent = nights(store, "thin", str(tmp_path / "nowhere"))
    assert absent.code == 2
    assert "network.toml: " in absent.err
    whole = ("--newest", "1", "--weeks", "0", "--months", "0")
    with Store.open(store.path).lock():
        assert nights(store, "thin", *whole).code == 0
        busy = nights(store, "thin", *whole, "--remove")
    assert busy.code == 2
    assert "another process" in busy.err
    assert len(store.nights()) == 2
