"""All nights in SQL: the documented questions, pruning, and that nothing can be changed."""

from __future__ import annotations

import re
from datetime import datetime, timedelta, timezone
from pathlib import Path

import pyarrow as pa
import pytest

from legworth.store import NightDamagedError, Store, StoreError
from legworth.store.sql import damage_met, query
from tests.legworth.store.small_nights import FIRST, PARTS, fill, manifest_of, parquet, publish, publish_priced

DOCUMENT = (Path(__file__).parents[3] / "docs" / "store.md").read_text(encoding="utf-8")
QUESTIONS = re.findall(r"```sql\n(.*?)```", DOCUMENT, re.DOTALL)


@pytest.fixture(scope="module")
def priced(tmp_path_factory: pytest.TempPathFactory) -> Store:
    store = Store.open(tmp_path_factory.mktemp("priced") / "store", create=True)
    before = publish_priced(store)
    last = publish_priced(store, day=1, factor=1.25)
    store.restore(before.name, "desk", "to see that order is not by what is in force")
    store.restore(last.name, "desk", "back again")
    return store


@pytest.fixture
def store(tmp_path: Path) -> Store:
    return Store.open(tmp_path / "store", create=True)


def test_a_leg_is_followed_from_night_to_night(priced: Store) -> None:
    rows = query(priced, QUESTIONS[0]).to_pylist()
    assert [row["night"] for row in rows] == ["00001-2030-02-25", "00002-2030-02-26"]
    assert rows[0]["remaining"] == rows[1]["remaining"] == 12, "24 seats, 12 sold"
    assert rows[0]["bid_price"] > 0
    assert rows[1]["bid_price"] == pytest.approx(1.25 * rows[0]["bid_price"], abs=0.01)


def test_the_greatest_moves_come_first(priced: Store) -> None:
    night = publish_with_before(priced)
    rows = query(priced, QUESTIONS[1]).to_pylist()
    assert {row["leg"] for row in rows} == {"L1", "L2", "L3", "L4", "L5"}
    assert all(row["price_now"] == pytest.approx(2.0 * row["price_before"]) for row in rows)
    assert [abs(row["moved"]) for row in rows] == sorted((abs(row["moved"]) for row in rows), reverse=True)
    assert {row["seats_gone"] for row in rows} == {0}
    assert night in {found.name for found in priced.nights()}


def publish_with_before(store: Store) -> str:
    """Put a night in force whose manifest names the first one as the night before."""
    first = store.nights()[0]
    with store.begin(FIRST) as aside:
        for path in first.manifest.files:
            if path.endswith("bid_prices.parquet"):
                table = first.table("bid_prices", parts=[path.split("/", maxsplit=1)[0].removeprefix("part=")])
                twice = pa.compute.multiply(table["bid_price"], 2.0)
                place = table.column_names.index("bid_price")
                aside.write(path, parquet(table.set_column(place, "bid_price", twice).drop_columns("part")))
            else:
                aside.take_over(path, first)
        known = first.manifest
        update = {"night": aside.name, "number": aside.number, "before": first.name}
        return aside.publish(known.model_copy(update=update)).name


def test_money_at_stake_adds_up(priced: Store) -> None:
    rows = query(priced, QUESTIONS[2]).to_pylist()
    assert rows
    night = priced.in_force()
    assert night is not None
    table = night.table("connections", ["at_stake", "disagreement"]).to_pandas()
    expected = table.loc[table["disagreement"].notna(), "at_stake"].sum()
    assert sum(row["at_stake"] for row in rows) == pytest.approx(expected, abs=0.01 * len(rows))


def test_routes_are_joined_with_their_prices(priced: Store) -> None:
    rows = query(priced, QUESTIONS[3]).to_pylist()
    assert {(row["origin"], row["destination"], row["departures"]) for row in rows} == {
        ("NOR", "HUB", 1),
        ("HUB", "SUD", 1),
        ("HUB", "OST", 1),
        ("OST", "NOR", 1),
        ("SUD", "HUB", 1),
    }
    assert all(0 < row["expected_load_percent"] <= 100 for row in rows)


def test_what_nights_cost(priced: Store) -> None:
    rows = query(priced, QUESTIONS[4]).to_pylist()
    assert [row["parts"] for row in rows][:2] == [3, 3]
    assert [row["revenue_to_come"] for row in rows][:2] == [3000, 3750]
    assert [row["seconds"] for row in rows][:2] == [3.0, 3.0]
    assert sum(row["in_force"] for row in rows) == 1


def test_all_five_questions_are_tested() -> None:
    assert len(QUESTIONS) == 5


def test_views_give_what_the_tables_hold(priced: Store) -> None:
    with priced.sql() as connection:
        views = {
            name for (name,) in connection.execute("SELECT view_name FROM duckdb_views() WHERE NOT internal").fetchall()
        }
        for night in priced.nights():
            for table in night.manifest.rows:
                assert {table, f"tonight_{table}"} <= views
                connection.register("held", night.table(table))
                found = f"SELECT * EXCLUDE night FROM {table} WHERE night = '{night.name}'"
                for one, other in ((found, "FROM held"), ("FROM held", found)):
                    rows = connection.execute(f"{one} EXCEPT ALL {other}").fetchall()
                    assert rows == [], (table, night.name)
        (products,) = connection.execute("SELECT sum(products) FROM parts WHERE certified").fetchall()[0]
    assert products == 17 * len(priced.nights())


def test_a_condition_on_night_or_part_reads_no_other_file(store: Store) -> None:
    first, second = publish(store, 1.0), publish(store, 2.0, day=1)
    (first.folder / f"part={PARTS[0]}" / "bid_prices.parquet").write_bytes(b"spoiled")
    ask = "SELECT sum(bid_price) AS total FROM bid_prices WHERE "
    assert query(store, f"{ask} night = '{second.name}'").to_pydict() == {"total": [12.0]}
    assert query(store, f"{ask} part = '{PARTS[1]}'").to_pydict() == {"total": [9.0]}
    assert query(store, "SELECT sum(bid_price) AS total FROM tonight_bid_prices").to_pydict() == {"total": [12.0]}
    with pytest.raises(StoreError, match="cannot be answered"):
        query(store, f"{ask} true")


def test_columns_that_only_some_parts_or_nights_have_are_null_elsewhere(store: Store) -> None:
    publish(store, 1.0)
    with store.begin(FIRST) as aside:
        fill(aside, 2.0)
        aside.write("part=2030-03-01/odd.parquet", parquet(pa.table({"n": [1], "word": pa.nulls(1)})))
        aside.write("part=2030-03-02/odd.parquet", parquet(pa.table({"n": [2], "word": ["two"], "more": [0.5]})))
        aside.publish(manifest_of(aside, FIRST))
    with store.begin(FIRST) as aside:
        fill(aside, 3.0)
        aside.write("part=2030-03-01/odd.parquet", parquet(pa.table({"n": [3.5], "late": [True]})))
        aside.publish(manifest_of(aside, FIRST))
    rows = query(store, "SELECT n, word, more, late FROM odd ORDER BY n").to_pydict()
    assert rows == {
        "n": [1.0, 2.0, 3.5],
        "word": [None, "two", None],
        "more": [None, 0.5, None],
        "late": [None, None, True],
    }
    assert query(store, "SELECT count(*) AS rows FROM tonight_odd").to_pydict() == {"rows": [1]}
    assert query(store, "SELECT count(*) AS rows FROM bid_prices").to_pydict() == {"rows": [18]}


def test_damaged_nights_are_passed_over(store: Store) -> None:
    first, second = publish(store, 1.0), publish(store, 2.0, day=1)
    (second.folder / "manifest.json").write_text("{")
    assert query(store, "SELECT DISTINCT night FROM bid_prices").to_pydict() == {"night": [first.name]}
    assert query(store, "SELECT night, in_force FROM nights").to_pydict() == {
        "night": [first.name],
        "in_force": [False],
    }
    (line,) = damage_met(store.nights(), "SELECT 1")
    assert line.startswith(f"night {second.name} is damaged and left out: manifest.json ")
    with pytest.raises(NightDamagedError, match=f"{second.name}, which is in force, is damaged: .*nights verify"):
        query(store, "SELECT * FROM tonight_bid_prices")


def test_damage_in_the_way_of_an_answer_is_named_before_what_duckdb_says(store: Store) -> None:
    first, second = publish(store, 1.0), publish(store, 2.0, day=1)
    path = f"part={PARTS[0]}/bid_prices.parquet"
    content = (second.folder / path).read_bytes()
    (second.folder / path).write_bytes(content[:50])
    cut = rf"{path} has 50 bytes, not {len(content):,}"
    with pytest.raises(
        NightDamagedError, match=f"{second.name}, which is in force, is damaged: {cut}; .*nights verify"
    ):
        query(store, "SELECT bid_price FROM tonight_bid_prices")
    with pytest.raises(NightDamagedError, match=f"answered: night {second.name} is damaged: {cut}; .*nights verify"):
        query(store, "SELECT sum(bid_price) FROM bid_prices")
    sound = f"SELECT sum(bid_price) AS total FROM bid_prices WHERE night = '{first.name}'"
    assert query(store, sound).to_pydict() == {"total": [6.0]}
    assert damage_met(store.nights(), sound) == (
        f"night {second.name} is damaged: {path} has 50 bytes, not {len(content):,}",
    )
    assert damage_met(store.nights(), "SELECT * FROM nights") == (), "only tables that the statement names"
    with pytest.raises(StoreError, match=r"answered: .*nothing") as wrong:
        query(store, "SELECT nothing FROM bid_prices")
    assert "verify" not in str(wrong.value), "a fault of the statement is not laid on the files"


def test_a_lost_file_is_remarked_on_where_its_rows_are_lacking(store: Store) -> None:
    first, _ = publish(store, 1.0), publish(store, 2.0, day=1)
    (first.folder / f"part={PARTS[0]}" / "bid_prices.parquet").unlink()
    ask = "SELECT count(*) AS rows FROM bid_prices"
    assert query(store, ask).to_pydict() == {"rows": [9]}
    (line,) = damage_met(store.nights(), ask)
    assert f"night {first.name} is damaged: part={PARTS[0]}/bid_prices.parquet is missing" in line


def test_a_file_that_changed_without_its_length_is_looked_for_with_verify(store: Store) -> None:
    night = publish(store, 1.0)
    path = night.folder / f"part={PARTS[0]}" / "bid_prices.parquet"
    path.write_bytes(b"PAR1" + b"\xff" * (path.stat().st_size - 8) + b"PAR1")
    with pytest.raises(StoreError, match="look with `legworth nights verify`"):
        query(store, "SELECT sum(bid_price) FROM bid_prices")


def test_tonight_is_missed_where_no_night_is_in_force(store: Store) -> None:
    ask = "SELECT * FROM tonight_bid_prices"
    with pytest.raises(StoreError, match=r"no night is in force in .*; run `legworth refresh`"):
        query(store, ask)
    night = publish(store, 1.0)
    (store.path / "in_force").unlink()
    with pytest.raises(NightDamagedError, match=f"no night is in force .* restore {night.name} --reason WHY"):
        query(store, ask)


def test_an_empty_store_answers(store: Store) -> None:
    assert query(store, "SELECT count(*) AS nights FROM nights").to_pydict() == {"nights": [0]}


@pytest.mark.parametrize(
    "statement",
    [
        "",
        "SELECT 1; SELECT 2",
        "COPY (SELECT 1) TO '{folder}/out.csv'",
        "COPY (SELECT 1) TO '{folder}/store/nights/out.csv'",
        "CREATE TABLE x (n INTEGER)",
        "DROP VIEW bid_prices",
        "ATTACH '{folder}/x.db'",
        "SET enable_external_access = true",
        "INSTALL httpfs",
        "SELECT * FROM read_csv('{folder}/secret.csv')",
        "SELECT * FROM '{folder}/secret.csv'",
        "SELECT * FROM read_text('{folder}/secret.csv')",
        "SELECT nothing FROM bid_prices",
        "SELEKT 1",
    ],
)
def test_a_query_reads_the_nights_and_nothing_else(store: Store, tmp_path: Path, statement: str) -> None:
    publish(store, 1.0)
    (tmp_path / "secret.csv").write_text("a\n1\n")
    before = sorted(path for path in tmp_path.rglob("*") if path.name != "lock")
    with pytest.raises(StoreError) as refused:
        query(store, statement.format(folder=tmp_path))
    assert "\n" not in str(refused.value)
    assert sorted(path for path in tmp_path.rglob("*") if path.name != "lock") == before


def test_folders_with_quotes_in_their_names(tmp_path: Path) -> None:
    store = Store.open(tmp_path / 'it\'s "here" [1]*', create=True)
    publish(store, 1.0)
    assert query(store, "SELECT count(*) AS n FROM tonight_bid_prices").to_pydict() == {"n": [6]}


def test_instants_and_certificates_are_those_of_the_manifest(store: Store) -> None:
    as_of = datetime(2030, 3, 1, 2, 30, tzinfo=timezone(timedelta(hours=-2)))
    proofs = [{"bid_prices": {"holds": True}, "mean_demand": {"holds": holds}} for holds in (True, False)]
    with store.begin(as_of) as aside:
        fill(aside, 1.0)
        whole = manifest_of(aside, as_of)
        certificates = dict(zip(whole.part, proofs, strict=True))
        parts = tuple(part.model_copy(update={"certificate": certificates[part.name]}) for part in whole.parts)
        aside.publish(whole.model_copy(update={"parts": parts}))
    (row,) = query(store, "SELECT as_of, published FROM nights").to_pylist()
    night = store.in_force()
    assert night is not None
    assert (row["as_of"], row["published"]) == (as_of, night.manifest.published)
    rows = query(store, "SELECT part, certified FROM parts").to_pylist()
    assert [row["certified"] for row in sorted(rows, key=lambda row: row["part"])] == [True, False]
    assert not whole.parts[0].certified, "without a certificate nothing is certified"
