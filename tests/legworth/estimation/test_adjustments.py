"""Adjustments: which products they hold for, what they make of demand, and what is told of them."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pytest

from legworth.estimation.adjustments import Adjusted, apply_adjustments
from legworth.estimation.adjustments_table import read_adjustments
from legworth.estimation.departures import network_departures
from network import InputError, Network, read_folder, table_schema
from tests.folders import Folder

HEADER = table_schema("legworth", "adjustments").names
SIGNED = {"who": "R. Stell", "when": "2030-02-20T10:00+01:00", "why": "a fair"}


@pytest.fixture(scope="module")
def network(tmp_path_factory: pytest.TempPathFactory) -> Network:
    return read_folder(Folder().write(tmp_path_factory.mktemp("network"))).network


def row(name: str, **values: object) -> str:
    cells = {**SIGNED, "adjustment": name, **values}
    return ",".join(str(cells.get(column, "")) for column in HEADER)


def adjusted(network: Network, folder: Path, rows: Sequence[str]) -> Adjusted:
    path = folder / "adjustments.csv"
    path.write_text("\n".join([",".join(HEADER), *rows]) + "\n", encoding="utf-8")
    departures = network_departures(network, history_names(network))
    log, scopes, _ = read_adjustments(path, network, departures)
    return apply_adjustments(network.demand, log, scopes, departures.date[network.product_itinerary])


def history_names(network: Network) -> np.ndarray:
    return np.array([f"{name}-any" for name in network.itinerary], dtype=object)


def faults(network: Network, folder: Path, rows: Sequence[str]) -> list[str]:
    with pytest.raises(InputError) as error:
        adjusted(network, folder, rows)
    return [str(fault) for fault in error.value.faults]


def touched(network: Network, found: Adjusted) -> set[str]:
    return {
        f"{network.itinerary[network.product_itinerary[j]]} {network.fare_classes[network.product_class[j]]}"
        for j in np.flatnonzero(found.changed)
    }


@pytest.mark.parametrize(
    ("scope", "products"),
    [
        ({"leg": "L2", "fare_class": "A"}, {"HUB-SUD A", "NOR-SUD A"}),
        ({"itinerary": "OST-NOR"}, {"OST-NOR A", "OST-NOR B"}),
        ({"itinerary": "OST-NOR-any", "fare_class": "B"}, {"OST-NOR B"}),
        ({"origin": "NOR", "destination": "SUD"}, {"NOR-SUD A", "NOR-SUD B", "NOR-SUD C"}),
        ({"first_departure": "2030-03-02", "last_departure": "2030-03-02"}, {"OST-NOR A", "OST-NOR B"}),
        ({"first_departure": "2030-03-03"}, {"SUD-HUB A", "SUD-HUB B"}),
        ({"leg": "L1", "destination": "HUB", "fare_class": "C"}, {"NOR-HUB C"}),
    ],
)
def test_a_row_holds_for_what_meets_all_its_conditions(
    network: Network, tmp_path: Path, scope: dict[str, str], products: set[str]
) -> None:
    found = adjusted(network, tmp_path, [row("one", factor=2, **scope)])
    assert touched(network, found) == products
    assert found.log[0].products == len(products)
    assert found.log[0].scope == scope


def test_a_row_without_conditions_holds_for_all(network: Network, tmp_path: Path) -> None:
    found = adjusted(network, tmp_path, [row("one", factor=1.5)])
    np.testing.assert_allclose(found.demand.mean, 1.5 * network.demand.mean)


def test_a_factor_leaves_the_rest_alone_and_keeps_the_variation_of_the_rate(network: Network, tmp_path: Path) -> None:
    found = adjusted(network, tmp_path, [row("one", factor=2, leg="L4")])
    at = np.flatnonzero(found.changed)
    rest = np.setdiff1d(np.arange(network.n_products), at)
    assert np.array_equal(found.demand.mean[rest], network.demand.mean[rest])
    assert np.array_equal(found.demand.deviation[rest], network.demand.deviation[rest])
    before, after = network.demand.take(at), found.demand.take(at)
    np.testing.assert_allclose(after.mean, 2 * before.mean)
    over = [np.maximum(d.deviation**2 - d.mean, 0) / d.mean**2 for d in (before, after)]
    np.testing.assert_allclose(over[1], over[0], atol=1e-9)


def test_rows_are_applied_in_their_order(network: Network, tmp_path: Path) -> None:
    half, double = row("half", factor=0.5, leg="L4"), row("double", factor=2, leg="L4")
    value = row("value", value=14, leg="L4")
    product = adjusted(network, tmp_path, [half, double])
    np.testing.assert_allclose(product.demand.mean, network.demand.mean)
    last = adjusted(network, tmp_path, [half, value])
    then = adjusted(network, tmp_path, [value, half])
    at = np.flatnonzero(last.changed)
    assert last.demand.mean[at].sum() == pytest.approx(14)
    assert then.demand.mean[at].sum() == pytest.approx(7)
    assert set(then.names[then.changed]) == {"value; half"}
    assert [line.shared for line in then.log] == [0, len(at)]
    assert (then.log[1].before, then.log[1].after) == (pytest.approx(14), pytest.approx(7))


def test_a_value_is_shared_in_proportion_on_every_date(network: Network, tmp_path: Path) -> None:
    found = adjusted(network, tmp_path, [row("one", value=30, fare_class="A")])
    departures = network_departures(network)
    date = departures.date[network.product_itinerary]
    chosen = network.product_class == 0
    for day in np.unique(date):
        mine = chosen & (date == day)
        assert found.demand.mean[mine].sum() == pytest.approx(30)
        ratio = found.demand.mean[mine] / network.demand.mean[mine]
        np.testing.assert_allclose(ratio, ratio[0])


def test_a_value_where_nobody_was_expected_is_shared_evenly(network: Network, tmp_path: Path) -> None:
    rows = [row("none", factor=0, leg="L4"), row("some", value=9, leg="L4")]
    found = adjusted(network, tmp_path, rows)
    at = np.flatnonzero(found.changed)
    np.testing.assert_allclose(found.demand.mean[at], 4.5)
    np.testing.assert_allclose(found.demand.deviation[at], np.sqrt(4.5))


def test_what_has_expired_changes_nothing_and_is_told(network: Network, tmp_path: Path) -> None:
    rows = [
        row("over", factor=2, until="2030-02-25T02:30+01:00"),
        row("on", factor=2, leg="L4", until="2030-02-25T02:31+01:00"),
    ]
    found = adjusted(network, tmp_path, rows)
    assert [line.expired for line in found.log] == [True, False]
    assert set(found.names[found.changed]) == {"on"}
    assert found.log[0].until == "2030-02-25T01:30:00+00:00"


def test_every_fault_is_told_at_once(network: Network, tmp_path: Path) -> None:
    rows = [
        row("a", factor=2, leg="L9"),
        row("b"),
        row("c", factor=2, value=3),
        row("d", factor=-1),
        row("e", factor=2, first_departure="2030-03-40"),
        row("f", factor=2, first_departure="2030-03-04", last_departure="2030-03-03"),
        row("g", factor=2, itinerary="NOWHERE", fare_class="Z"),
        row("h", factor=2, until="2030-03-04"),
        row("a", factor=2),
        row("j", factor=2, who=""),
    ]
    told = [fault.split(": ")[:2] for fault in faults(network, tmp_path, rows)]
    assert [(int(place.split(":")[1]), column) for place, column in told] == [
        (2, "leg"),
        (3, "factor"),
        (4, "factor"),
        (5, "factor"),
        (6, "first_departure"),
        (7, "last_departure"),
        (8, "fare_class"),
        (8, "itinerary"),
        (9, "until"),
        (10, "adjustment"),
        (11, "who"),
    ]


def test_a_row_that_holds_for_nothing_is_a_warning(network: Network, tmp_path: Path) -> None:
    path = tmp_path / "adjustments.csv"
    path.write_text(",".join(HEADER) + "\n" + row("one", factor=2, leg="L1", fare_class="C", origin="SUD") + "\n")
    _, _, warnings = read_adjustments(path, network, network_departures(network))
    assert "'one' holds for no product" in str(warnings[0])
