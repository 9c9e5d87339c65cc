"""The hand-over: what an inventory system reads, and that a copy cut short anywhere is known as such.

Outside checks: ``sha256sum`` of GNU coreutils reads the list of checksums, pandas and DuckDB read the files.
"""

from __future__ import annotations

import hashlib
import json
import shutil
import subprocess
from collections.abc import Callable, Iterator
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import duckdb
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from legworth.results import result_schemas
from legworth.store import Night, NightDamagedError, Store, StoreBusyError, StoreError
from legworth.store import hand_over as module
from legworth.store.hand_over import HandOverOptions, hand_over
from legworth.store.hand_over_reading import read_hand_over
from tests.legworth.store.small_nights import (
    FIRST,
    PARTS,
    manifest_of,
    parquet,
    priced_parts,
    prices,
    publish,
    publish_priced,
)
from tests.networks import examples

INSTANT = datetime(2030, 2, 26, 4, 15, tzinfo=timezone(timedelta(hours=1)))
WAYS = {
    "both": HandOverOptions(),
    "by part": HandOverOptions(by_part=True),
    "csv": HandOverOptions(("csv",)),
    "parquet by part": HandOverOptions(("parquet",), by_part=True),
}


@pytest.fixture(scope="module")
def night(tmp_path_factory: pytest.TempPathFactory) -> Night:
    return publish_priced(Store.open(tmp_path_factory.mktemp("night") / "store", create=True))


@pytest.fixture(scope="module", params=WAYS.values(), ids=WAYS.keys())
def handed(request: pytest.FixtureRequest, night: Night, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("handed") / "prices"
    hand_over(night, folder, INSTANT, request.param)
    return folder


def files_of(folder: Path) -> list[Path]:
    return sorted(path for path in folder.rglob("*") if path.is_file() and path.name != ".lock")


def expected(night: Night, table: str) -> pd.DataFrame:
    frame = night.table(table).drop_columns("part").to_pandas()
    return frame.assign(leg=frame["leg"].astype("str"))


@pytest.mark.parametrize("table", ["bid_prices", "price_curves"])
def test_every_reader_finds_the_prices_of_the_night(night: Night, handed: Path, table: str) -> None:
    wanted = expected(night, table)
    columns = ["night", "valid_from", *result_schemas()[table].names]
    for ending in ("csv", "parquet"):
        paths = [path for path in files_of(handed) if table in str(path) and path.suffix == f".{ending}"]
        if not paths:
            continue
        read = pd.read_csv if ending == "csv" else pd.read_parquet
        found = pd.concat([read(path) for path in paths], ignore_index=True)
        assert list(found.columns) == columns
        assert set(found["night"]) == {night.name}
        assert set(pd.to_datetime(found["valid_from"], utc=True)) == {pd.Timestamp("2030-02-26T03:15Z")}
        plain = found[list(wanted.columns)].assign(leg=found["leg"].astype("str"))
        pd.testing.assert_frame_equal(plain, wanted, check_exact=True)
        (rows,) = duckdb.sql(f"SELECT count(*) FROM read_{ending}({[str(path) for path in paths]})").fetchall()[0]
        assert rows == len(wanted)
    read_again = pa.Table.from_batches(read_hand_over(handed).batches(table))
    assert read_again["bid_price"].to_pylist() == wanted["bid_price"].tolist()


def test_the_note_says_what_was_handed_over(night: Night, handed: Path) -> None:
    found = read_hand_over(handed)
    assert (found.night, found.valid_from) == (night.name, datetime(2030, 2, 26, 3, 15, tzinfo=UTC))
    assert found.rows == {"bid_prices": 5, "price_curves": night.manifest.rows["price_curves"]}
    assert set(found.files) == {path.relative_to(handed).as_posix() for path in files_of(handed)} - {
        "SHA256SUMS",
        "hand_over.json",
    }
    with pytest.raises(StoreError, match="has no table"):
        next(found.batches("connections"))


def test_sha256sum_reads_the_list(handed: Path) -> None:
    program = shutil.which("sha256sum")
    if program is None:
        pytest.skip("sha256sum of GNU coreutils is not here")
    command = [program, "-c", "--strict", "SHA256SUMS"]
    done = subprocess.run(command, cwd=handed, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    assert done.stdout.count(": OK\n") == len(files_of(handed)) - 1


def test_a_copy_cut_at_any_file_is_known(handed: Path, tmp_path: Path) -> None:
    for number, path in enumerate(files_of(handed)):
        copy = tmp_path / str(number)
        shutil.copytree(handed, copy)
        (copy / path.relative_to(handed)).unlink()
        with pytest.raises(NightDamagedError, match="is not whole"):
            read_hand_over(copy)


@examples(80)
@given(data=st.data())
def test_a_copy_cut_or_changed_at_any_byte_is_known(handed: Path, data: st.DataObject) -> None:
    path = data.draw(st.sampled_from(files_of(handed)))
    content = path.read_bytes()
    place = data.draw(st.integers(0, len(content) - 1))
    bit = data.draw(st.integers(-1, 7))
    changed = (
        content[:place] if bit < 0 else content[:place] + bytes([content[place] ^ (1 << bit)]) + content[place + 1 :]
    )
    path.write_bytes(changed)
    try:
        with pytest.raises(NightDamagedError, match="is not whole"):
            read_hand_over(handed)
    finally:
        path.write_bytes(content)
    assert read_hand_over(handed).folder == handed


def test_a_list_of_checksums_cut_anywhere_is_known_even_without_the_files_it_lost(handed: Path, tmp_path: Path) -> None:
    content = (handed / "SHA256SUMS").read_bytes()
    ends = {place + 1 for place, byte in enumerate(content[:-1]) if byte == ord("\n")}
    for length in sorted({*range(0, len(content), 29), *ends, *(end - 1 for end in ends), len(content) - 1}):
        (handed / "SHA256SUMS").write_bytes(content[:length])
        with pytest.raises(NightDamagedError, match="is not whole"):
            read_hand_over(handed)
    (handed / "SHA256SUMS").write_bytes(content)
    shutil.copytree(handed, tmp_path / "copy")
    lines = content.decode().splitlines(keepends=True)
    lost = lines.pop(0).split("  ")[1].strip()
    (tmp_path / "copy" / "SHA256SUMS").write_text("".join(lines))
    (tmp_path / "copy" / lost).unlink()
    with pytest.raises(NightDamagedError, match="does not name the files"):
        read_hand_over(tmp_path / "copy")


def test_an_earlier_hand_over_is_replaced_whole(night: Night, tmp_path: Path) -> None:
    folder = tmp_path / "prices"
    for options in WAYS.values():
        hand_over(night, folder, INSTANT, options)
        found = read_hand_over(folder)
        assert len(files_of(folder)) == len(found.files) + 2, "nothing of the earlier one remains"


def test_a_folder_with_anything_else_is_left_alone(night: Night, tmp_path: Path) -> None:
    (tmp_path / "letters").write_text("x")
    with pytest.raises(StoreError, match="holds letters, which is no part of a hand-over"):
        hand_over(night, tmp_path, INSTANT)
    with pytest.raises(StoreError, match="cannot write to"):
        hand_over(night, tmp_path / "letters", INSTANT)
    assert [path.name for path in tmp_path.iterdir()] == ["letters"]


def test_rows_stream_in_pieces_and_names_are_quoted_where_they_must_be(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(module, "ROWS", 4)
    store = Store.open(tmp_path / "store", create=True)
    table = {
        "leg": ['one, "two"', "three", "four\nfive"],
        "bid_price": [1.0, 0.1 + 0.2, 3.0],
        "next_seat": [1.0, 2.0, 3.0],
        "remaining": [1, 2, 3],
        "expected_sales": [0.0, 0.0, 0.0],
    }
    with store.begin(FIRST) as aside:
        aside.write("part=a/bid_prices.parquet", prices("a", 1.0))
        aside.write("part=b/bid_prices.parquet", parquet(pa.table(table)))
        aside.write("part=c/legs.parquet", parquet(pa.table({"leg": ["x"]})))
        night = aside.publish(manifest_of(aside, FIRST))
    told: list[tuple[int, int]] = []
    rows = hand_over(night, tmp_path / "prices", INSTANT, progress=lambda done, total: told.append((done, total)))
    assert rows == {"bid_prices": 6}
    assert told == [(1, 3), (2, 3), (3, 3)]
    found = pd.read_csv(tmp_path / "prices" / "bid_prices.csv")
    assert found["leg"].tolist()[3:] == table["leg"]
    assert found["bid_price"].tolist()[3:] == table["bid_price"], "every digit comes through"
    assert pd.read_parquet(tmp_path / "prices" / "bid_prices.parquet")["leg"].tolist()[3:] == table["leg"]


def test_a_damaged_night_is_not_handed_over(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    night = publish(store, 1.0)
    path = night.folder / f"part={PARTS[1]}" / "bid_prices.parquet"
    hand_over(night, tmp_path / "prices", INSTANT)
    other = parquet(pa.table({"leg": ["x"]}))
    changed = "has been changed since it was published"
    for data, why in (
        (prices(PARTS[1], 1.0)[:-9], changed),
        (prices(PARTS[1], 1.01), changed),
        (other, changed),
    ):
        path.write_bytes(data)
        with pytest.raises(NightDamagedError, match=why):
            hand_over(night, tmp_path / "prices", INSTANT)
    path.unlink()
    with pytest.raises(NightDamagedError, match=r"2030-03-02/bid_prices\.parquet is missing; see what is sound"):
        hand_over(night, tmp_path / "prices", INSTANT)
    assert read_hand_over(tmp_path / "prices").rows == {"bid_prices": 6}, "the earlier hand-over is still there"


@examples(60)
@given(data=st.data())
def test_a_bit_that_flipped_in_any_file_of_prices_is_named_with_the_file(
    night: Night, data: st.DataObject, tmp_path_factory: pytest.TempPathFactory
) -> None:
    name = data.draw(st.sampled_from(sorted(path for path in night.manifest.files if path.endswith(CARRIED))))
    content = (night.folder / name).read_bytes()
    place = data.draw(st.integers(0, len(content) - 1))
    flipped = content[place] ^ (1 << data.draw(st.integers(0, 7)))
    (night.folder / name).write_bytes(content[:place] + bytes([flipped]) + content[place + 1 :])
    try:
        with pytest.raises(NightDamagedError, match=f"{name} has been changed .*nights verify.*--night") as refused:
            hand_over(night, tmp_path_factory.mktemp("flipped") / "prices", INSTANT, HandOverOptions(("csv",)))
    finally:
        (night.folder / name).write_bytes(content)
    assert "\n" not in str(refused.value)


CARRIED = ("/bid_prices.parquet", "/price_curves.parquet")


def test_folders_are_named_by_text_or_path(night: Night, tmp_path: Path) -> None:
    rows = hand_over(night, str(tmp_path / "prices"), INSTANT)
    found = read_hand_over(str(tmp_path / "prices"))
    assert found == read_hand_over(tmp_path / "prices")
    assert found.rows == rows
    assert sum(batch.num_rows for batch in found.batches("bid_prices")) == rows["bid_prices"]


@pytest.mark.parametrize(
    "spoil",
    [
        lambda path: path.unlink(),
        lambda path: path.write_bytes(b""),
        lambda path: path.write_bytes(b"\xff\xfe"),
        lambda path: path.write_bytes(path.read_bytes().replace(b"bid_prices.csv", b"bid_prices\0csv")),
        lambda path: path.write_bytes(path.read_bytes().replace(b"bid_prices.csv", b".")),
    ],
    ids=["missing", "empty", "no text", "a zero in a name", "a folder"],
)
def test_a_damaged_list_of_checksums_is_damage(night: Night, tmp_path: Path, spoil: Callable[[Path], object]) -> None:
    hand_over(night, tmp_path / "prices", INSTANT)
    spoil(tmp_path / "prices" / "SHA256SUMS")
    with pytest.raises(NightDamagedError, match=r"is not whole: SHA256SUMS.*copy it again"):
        read_hand_over(tmp_path / "prices")
    with pytest.raises(NightDamagedError, match=r"is not whole: SHA256SUMS.* is missing"):
        read_hand_over(tmp_path / "nowhere")


@pytest.mark.parametrize("note", [b"{}", b"[]", b"?", b'{"night": "x", "valid_from": "soon", "rows": {}, "files": []}'])
def test_a_note_that_is_none_is_damage(tmp_path: Path, note: bytes) -> None:
    (tmp_path / "hand_over.json").write_bytes(note)
    (tmp_path / "SHA256SUMS").write_text(f"{hashlib.sha256(note).hexdigest()}  hand_over.json\n")
    with pytest.raises(NightDamagedError, match=r"hand_over\.json is not that of a hand-over"):
        read_hand_over(tmp_path)


def test_a_night_without_prices_is_not_handed_over(tmp_path: Path) -> None:
    store = Store.open(tmp_path / "store", create=True)
    with store.begin(FIRST) as aside:
        aside.write("part=a/legs.parquet", parquet(pa.table({"leg": ["x"]})))
        night = aside.publish(manifest_of(aside, FIRST))
    with pytest.raises(StoreError, match="no bid prices"):
        hand_over(night, tmp_path / "prices", INSTANT)


def test_one_hand_over_at_a_time(night: Night, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    refused = []

    def again(*_: object) -> Iterator[pa.Table]:
        with pytest.raises(StoreBusyError, match="another process is writing"):
            hand_over(night, tmp_path / "prices", INSTANT)
        refused.append(1)
        return iter(())

    monkeypatch.setattr(module, "_chunks", again)
    with pytest.raises(NightDamagedError, match="does not have the rows"):
        hand_over(night, tmp_path / "prices", INSTANT)
    assert refused


def test_curves_of_the_night_are_those_that_were_priced(night: Night, handed: Path) -> None:
    found = sum(tables["price_curves"].num_rows for tables in priced_parts().values())
    assert json.loads((handed / "hand_over.json").read_text())["rows"]["price_curves"] == found
    assert night.manifest.rows["price_curves"] == found
