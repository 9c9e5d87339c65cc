"""What must not matter does not: order of rows, names; and the order of fare classes is the one declared."""

from __future__ import annotations

import random
from pathlib import Path

import numpy as np
import pytest

from network import Network, read_folder
from tests.folders import TABLES, Folder, by_name


def read(folder: Folder, path: Path) -> Network:
    return read_folder(folder.write(path)).network


def shuffled(seed: int) -> Folder:
    folder, rng = Folder(), random.Random(seed)
    for table in TABLES:
        order = rng.sample(range(len(folder.table(f"{table}.csv"))), len(folder.table(f"{table}.csv")))
        folder.frame(f"{table}.csv", lambda frame, order=order: frame.iloc[order])
    return folder


@pytest.mark.parametrize("seed", range(8))
def test_the_order_of_rows_changes_only_the_order(seed: int, tmp_path: Path) -> None:
    folder = shuffled(seed)
    found, plain = read(folder, tmp_path / "shuffled"), read(Folder(), tmp_path / "plain")
    assert by_name(found) == by_name(plain)
    assert found.legs.name.tolist() == folder.table("legs.csv")["leg"].tolist()
    assert found.itinerary.tolist() == folder.table("itineraries.csv")["itinerary"].tolist()
    assert found.product_itinerary.dtype == np.int32
    key = found.product_itinerary * len(found.fare_classes) + found.product_class
    assert np.all(np.diff(key) > 0)


def test_names_do_not_matter(tmp_path: Path) -> None:
    """Names that sort the other way round, of other lengths and alphabets, give the same arrays."""
    new = {"L1": "Zürich-1", "L2": "λ", "L3": "-", "L4": "007", "L5": "A.B/C", "NOR": "1", "HUB": "None", "late": "nan"}
    folder = Folder()
    renamed = {
        table: folder.table(f"{table}.csv").map(
            lambda value: " ".join(
                new.get(word, word.replace("NOR-", "ɴ-").replace("HUB-", "NULL-")) for word in [*value.split(" ")]
            )
        )
        for table in TABLES
    }
    for table, frame in renamed.items():
        folder.frame(f"{table}.csv", lambda _, frame=frame: frame)
    found, plain = read(folder, tmp_path / "renamed"), read(Folder(), tmp_path / "plain")
    assert found.legs.name.tolist() == ["Zürich-1", "λ", "-", "007", "A.B/C"]
    for name in ("remaining", "path_start", "path_leg", "product_itinerary", "product_class", "fare", "curve"):
        np.testing.assert_array_equal(getattr(found, name), getattr(plain, name), err_msg=name)
    for name in ("origin", "destination", "departs", "arrives", "capacity", "sold"):
        np.testing.assert_array_equal(getattr(found.legs, name), getattr(plain.legs, name), err_msg=name)
    np.testing.assert_array_equal(found.demand.mean, plain.demand.mean)
    np.testing.assert_array_equal(found.curves.share, plain.curves.share)


def test_classes_stand_in_the_order_declared(tmp_path: Path) -> None:
    plain = read(Folder(), tmp_path / "plain")
    turned = Folder().replace("network.toml", '["A", "B", "C"]', '["C", "B", "A", "unsold"]')
    found = read_folder(turned.write(tmp_path / "turned"))
    assert found.network.fare_classes == ("C", "B", "A", "unsold")
    assert found.network.fare[:3].tolist() == plain.fare[:3].tolist()[::-1]
    assert by_name(found.network)["products"] == by_name(plain)["products"]
    rising = [warning for warning in found.warnings if warning.column == "fare"]
    products, itineraries = plain.n_products, plain.n_itineraries
    assert len(rising) == products - itineraries, "every class but the first of an itinerary costs more than the last"


def test_without_a_declared_order_classes_stand_as_fares_name_them(tmp_path: Path) -> None:
    folder = Folder().replace("network.toml", 'fare_classes = ["A", "B", "C"]\n', "")
    assert read(folder, tmp_path / "plain").fare_classes == ("A", "B", "C")
    folder = folder.frame("fares.csv", lambda frame: frame[::-1])
    assert read(folder, tmp_path / "turned").fare_classes == ("B", "A", "C")


def test_booking_curves_fall_in_days_whatever_their_rows(tmp_path: Path) -> None:
    curves = read(shuffled(3), tmp_path).curves
    for q in range(len(curves)):
        rows = slice(curves.start[q], curves.start[q + 1])
        assert np.all(np.diff(curves.days_before[rows]) < 0)
        assert np.all(np.diff(curves.share[rows]) >= 0)
        assert (curves.days_before[rows][-1], curves.share[rows][-1]) == (0, 1)
