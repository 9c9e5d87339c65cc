"""Large tables are read in stretches: wherever these end, the same network and the same faults come out."""

from __future__ import annotations

import io
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet
import pytest

from network import Fault, InputError, cells, demand, read_folder
from tests.folders import TABLES, Folder, by_name
from tests.legworth.bad_input.cells import CELLS
from tests.legworth.bad_input.relations import RELATIONS, SEVERAL

FAULTY = {**CELLS, **RELATIONS, **SEVERAL}


def faults_of(path: Path) -> list[Fault]:
    with pytest.raises(InputError) as refused:
        read_folder(path)
    return list(refused.value.faults)


def with_row_groups(folder: Folder, size: int, *, plain: bool = True) -> Folder:
    """The folder in Parquet, so many rows a group; with plain text, or with categories as pandas writes them."""
    for table in TABLES:
        if folder.files.get(f"{table}.csv") is None:
            continue
        frame = folder.table(f"{table}.csv")
        frame = frame.astype("str") if plain else frame.astype("category")
        content = io.BytesIO()
        arrow = pa.Table.from_pandas(frame, preserve_index=False)
        pa.parquet.write_table(arrow, content, row_group_size=size, store_schema=not plain)
        folder.drop(f"{table}.csv").put(f"{table}.parquet", content.getvalue())
    return folder


@pytest.mark.parametrize("name", FAULTY)
def test_faults_do_not_depend_on_where_checks_are_cut(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = FAULTY[name][0](Folder()).write(tmp_path)
    whole = faults_of(path)
    monkeypatch.setattr(cells, "ROWS_AT_ONCE", 2)
    assert faults_of(path) == whole


@pytest.mark.parametrize("name", RELATIONS)
def test_faults_do_not_depend_on_row_groups(name: str, tmp_path: Path) -> None:
    spoil, places = RELATIONS[name]
    several, one = (faults_of(with_row_groups(spoil(Folder()), n).write(tmp_path / str(n))) for n in (2, 1000))
    assert several == one
    assert {(fault.file.partition(".")[0], fault.column) for fault in one} == {
        (file.partition(".")[0], column) for file, _, column in places
    }


@pytest.mark.parametrize("plain", [True, False])
@pytest.mark.parametrize("size", [1, 2, 5])
def test_row_groups_give_the_network_of_csv(size: int, plain: bool, tmp_path: Path) -> None:
    folder = with_row_groups(Folder(), size, plain=plain)
    assert by_name(read_folder(folder.write(tmp_path / "parquet")).network) == by_name(
        read_folder(Folder().write(tmp_path / "csv")).network
    )


def test_a_dictionary_that_holds_a_name_twice_is_read(tmp_path: Path) -> None:
    """Arrow allows a dictionary to repeat itself and to hold blanks; both are judged by what is written."""
    folder = Folder()
    frame = folder.table("demand.csv")
    text = frame["curve"].to_numpy(dtype=object)
    codes = pa.array([("late", "early", "").index(name) + 3 * (row % 2) for row, name in enumerate(text)], pa.int32())
    twice = pa.DictionaryArray.from_arrays(codes, pa.array(["late", "early", "", "late", "early", ""]))
    arrow = pa.Table.from_pandas(frame.astype("str"), preserve_index=False)
    arrow = arrow.set_column(arrow.column_names.index("curve"), "curve", twice)
    content = io.BytesIO()
    pa.parquet.write_table(arrow, content)
    folder.drop("demand.csv").put("demand.parquet", content.getvalue())
    found = read_folder(folder.write(tmp_path / "twice")).network
    assert by_name(found) == by_name(read_folder(Folder().write(tmp_path / "csv")).network)


def test_families_do_not_depend_on_where_demand_is_cut(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = Folder().write(tmp_path)
    whole = read_folder(path).network.demand.family.tolist()
    monkeypatch.setattr(demand, "ROWS_AT_ONCE", 2)
    assert read_folder(path).network.demand.family.tolist() == whole
    assert len(set(whole)) > 1


def test_rows_in_any_order_give_the_same_products(tmp_path: Path) -> None:
    folder = Folder()
    for table, way in (("fares", 3), ("demand", 5)):
        folder.frame(f"{table}.csv", lambda frame, way=way: frame.sample(frac=1.0, random_state=way))
    found = read_folder(folder.write(tmp_path / "shuffled")).network
    assert by_name(found) == by_name(read_folder(Folder().write(tmp_path / "plain")).network)
