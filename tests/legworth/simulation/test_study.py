"""Whole studies: reproducible to the byte, bounded, and comparable path by path."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from legworth.simulation import BASELINE, Simulation, SimulationOptions, result_table, simulate
from legworth.simulation.entries import entries_of
from legworth.simulation.files import write_simulation
from legworth.simulation.forecast import Stress
from legworth.simulation.page import simulation_page
from legworth.simulation.report import simulation_as_json
from legworth.simulation.stress import under_stress
from legworth.simulation.table import tightest
from lp import LpOptions, Method, solve_network
from network import Network, SettingError, read_folder, table_schema
from tests.folders import Folder

METHODS = ("first-come", "leg", "leg+", "adjusted", "virtual", "deterministic", "probabilistic", "curves")
AGAIN = ("adjusted+", "deterministic+", "curves+")
OPTIONS = SimulationOptions(paths=40, seed=5, methods=(*METHODS, *AGAIN), reoptimised_paths=7, readings=4)


@pytest.fixture(scope="module")
def network(tmp_path_factory: pytest.TempPathFactory) -> Network:
    return read_folder(Folder().write(tmp_path_factory.mktemp("network"))).network


@pytest.fixture(scope="module")
def found(network: Network) -> Simulation:
    return simulate(network, OPTIONS)


def files(found: Simulation, folder: Path) -> dict[str, bytes]:
    table = result_table(found)
    paths = write_simulation(folder, table, simulation_as_json(found, table, []), simulation_page(found, table, []))
    return {path.name: path.read_bytes() for path in paths}


def test_no_control_beats_the_hindsight_optimum_of_its_own_path(found: Simulation) -> None:
    for name, figures in found.tallies.items():
        paths = len(figures.revenue)
        assert paths == (7 if name in AGAIN else 40)
        assert np.all(figures.revenue <= found.hindsight[:paths] * (1 + 1e-9))
        assert np.all(figures.revenue > 0)


def test_same_seed_same_bytes_and_processes_do_not_matter(network: Network, found: Simulation, tmp_path: Path) -> None:
    first = files(found, tmp_path / "first")
    assert set(first) == {"simulation.csv", "simulation.json", "simulation.html"}
    assert files(simulate(network, replace(OPTIONS, jobs=2)), tmp_path / "second") == first
    few = replace(OPTIONS, methods=("leg+",), paths=5)
    assert files(simulate(network, few), tmp_path / "third") == files(simulate(network, few), tmp_path / "fourth")
    assert files(simulate(network, replace(few, seed=6)), tmp_path / "fifth") != files(
        simulate(network, few), tmp_path / "sixth"
    )


def test_more_paths_begin_with_the_same_ones(network: Network, found: Simulation) -> None:
    few = simulate(network, replace(OPTIONS, paths=12, methods=("curves",)))
    np.testing.assert_array_equal(few.tallies["curves"].revenue, found.tallies["curves"].revenue[:12])
    np.testing.assert_allclose(few.hindsight, found.hindsight[:12], rtol=1e-12)


def test_bounds_are_in_order(network: Network, found: Simulation) -> None:
    value = {bound.name: bound.value for bound in found.bounds}
    optimum = solve_network(network, LpOptions(Method.DETERMINISTIC)).objective
    assert value["deterministic"] == pytest.approx(optimum, rel=1e-9)
    assert value["legs_apart"] <= value["decomposition"] <= value["deterministic"] * (1 + 1e-9)
    assert value["split_by_price"] <= value["deterministic"] * (1 + 1e-9)
    assert value["hindsight"] == pytest.approx(float(found.hindsight.mean()))
    assert tightest(found.bounds).holds


def test_bounds_for_poisson_demand_are_not_claimed_for_other(found: Simulation) -> None:
    # The folder's demand varies more than Poisson demand.
    holds = {bound.name: bound.holds for bound in found.bounds}
    assert holds == {
        "hindsight": True,
        "deterministic": True,
        "decomposition": False,
        "legs_apart": False,
        "split_by_price": False,
    }


def test_table_keeps_its_schema_and_its_sums(network: Network, found: Simulation) -> None:
    table = result_table(found)
    assert tuple(table.columns) == table_schema("legworth", "simulation").names
    table_schema("legworth", "simulation").checks.validate(table)
    rows = table.set_index("method")
    assert rows.loc[BASELINE, ["difference", "difference_low", "difference_high"]].tolist() == [0.0, 0.0, 0.0]
    for name, figures in found.tallies.items():
        paths = len(figures.revenue)
        gap = figures.revenue - found.tallies[BASELINE].revenue[:paths]
        assert rows.loc[name, "difference"] == pytest.approx(gap.mean())
        assert rows.loc[name, "difference_low"] <= gap.mean() <= rows.loc[name, "difference_high"]
        assert np.array_equal(figures.built_up.sum(axis=(1, 2)), figures.passengers)
        taken = network.legs.sold.sum() + figures.occupied.mean()
        assert rows.loc[name, "load_factor"] == pytest.approx(taken / network.legs.capacity.sum())
        assert np.all(figures.occupied == figures.passengers + figures.connecting)
        free = network.remaining.sum() - figures.occupied
        assert np.all((figures.spoiled >= 0) & (figures.spoiled <= free))
        assert np.all(figures.refused_high <= figures.refused)


def test_first_come_first_served_spoils_only_for_want_of_the_other_leg(found: Simulation) -> None:
    spoiled = found.tallies["first-come"].spoiled
    assert spoiled.mean() < found.tallies["leg"].spoiled.mean()


def test_share_of_bound_of_few_paths_goes_by_their_own_hindsight(found: Simulation) -> None:
    rows = result_table(found).set_index("method")
    share = found.tallies["curves+"].revenue.sum() / found.hindsight[:7].sum()
    wanted = share * found.hindsight.mean() / tightest(found.bounds).value
    assert rows.loc["curves+", "share_of_bound"] == pytest.approx(wanted)


def test_right_forecast_under_neutral_stress_is_the_right_forecast(network: Network, found: Simulation) -> None:
    options = replace(OPTIONS, methods=METHODS, reoptimised_paths=0)
    same = simulate(network, options, Stress("as it is"))
    assert same.bounds == []
    np.testing.assert_array_equal(same.tallies["first-come"].revenue, found.tallies["first-come"].revenue)
    # Demand whose variance lies close to its mean is taken for Poisson either way.
    for name in METHODS:
        assert same.tallies[name].revenue.mean() == pytest.approx(found.tallies[name].revenue.mean(), rel=1e-9)


def test_stress_lines(found: Simulation) -> None:
    few = simulate(found.network, replace(OPTIONS, methods=("first-come", "curves"), paths=12))
    lines = under_stress(few)
    assert len({line.case for line in lines}) == 7
    for line in lines:
        assert line.difference_low <= line.difference <= line.difference_high
        if line.method == "first-come":
            assert line.revenue == pytest.approx(few.tallies["first-come"].revenue.mean())
        if line.survives is not None:
            assert line.survives == pytest.approx(line.difference / line.difference_right)


def test_prices_over_time(network: Network, found: Simulation) -> None:
    assert found.traces
    for trace in found.traces.values():
        assert "curves" in trace.price
        assert "first-come" not in trace.price
        for name, left in trace.left.items():
            assert np.all(np.diff(left) <= 0)
            known = trace.price[name][~np.isnan(trace.price[name])]
            assert np.all((known >= 0) & (known <= network.fare.max()))


def test_document_holds_no_seconds(found: Simulation) -> None:
    document = simulation_as_json(found, result_table(found), [])
    json.dumps(document, allow_nan=False)
    assert "seconds" not in document
    assert "jobs" not in document["settings"]


def test_departed_and_unconnected_legs_are_no_trouble(tmp_path: Path) -> None:
    folder = Folder().replace("network.toml", "2030-02-25T02:30", "2030-03-01T12:00")
    folder.add("legs.csv", "L6,HUB,NOR,2030-03-04T08:00+01:00,2030-03-04T09:30+01:00,8,1")
    network = read_folder(folder.write(tmp_path / "network")).network
    found = simulate(network, replace(OPTIONS, paths=5, reoptimised_paths=2))
    figures = found.tallies["curves"]
    assert figures.connecting.sum() == 0
    assert 0 < figures.occupied.sum() <= 5 * network.remaining.sum()
    assert np.all(figures.revenue <= found.hindsight * (1 + 1e-9))
    # L1, L2 and L3 have left: only the seats of the others count.
    sold = network.legs.sold[3:].sum() + figures.occupied.mean()
    share = result_table(found).set_index("method").loc["curves", "load_factor"]
    assert share == pytest.approx(sold / network.legs.capacity[3:].sum())


def test_everything_has_left(tmp_path: Path) -> None:
    folder = Folder().replace("network.toml", "2030-02-25T02:30", "2030-04-01T12:00")
    found = simulate(read_folder(folder.write(tmp_path / "network")).network, replace(OPTIONS, reoptimised_paths=2))
    table = result_table(found)
    assert (table[["revenue", "load_factor", "spoiled_seats"]] == 0).all(axis=None)
    assert "<svg" in simulation_page(found, table, [])


def test_nobody_asking_at_all(tmp_path: Path) -> None:
    folder = Folder().frame("demand.csv", lambda frame: frame.assign(mean="0", deviation="0"))
    found = simulate(read_folder(folder.write(tmp_path / "network")).network, replace(OPTIONS, reoptimised_paths=2))
    table = result_table(found)
    assert (table["revenue"] == 0).all()
    assert (table["share_of_bound"] == 0).all()
    assert "<svg" in simulation_page(found, table, [])


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"paths": 1}, "too few"),
        ({"reoptimised_paths": 1}, "at least 2"),
        ({"readings": 0}, "readings"),
        ({"demand_factor": 0.0}, "demand factor"),
        ({"reading_days": (3.0, -1.0)}, "reading days"),
        ({"seed": -1}, "seed"),
        ({"methods": ("leg", "lag")}, "unknown method 'lag'"),
        ({"methods": ("leg++",)}, "unknown method"),
    ],
)
def test_options_out_of_their_limits(change: dict[str, object], message: str) -> None:
    with pytest.raises(SettingError, match=message):
        replace(OPTIONS, **change)  # type: ignore[arg-type]


def test_demand_factor(network: Network, found: Simulation) -> None:
    half = simulate(network, replace(OPTIONS, methods=("first-come",), demand_factor=0.5, paths=200))
    figures, whole = half.tallies["first-come"], found.tallies["first-come"]
    asked = (figures.passengers + figures.refused).mean()
    wanted = 0.5 * network.demand.expected.sum()
    spread = (figures.passengers + figures.refused).std()
    assert abs(asked - wanted) <= 4 * spread / 200**0.5
    assert figures.refused.mean() < 0.5 * whole.refused.mean()


def test_unknown_leg_to_follow(network: Network) -> None:
    with pytest.raises(SettingError, match="no leg 'L9'"):
        simulate(network, replace(OPTIONS, legs=("L9",)))


def test_entries_keep_their_order_and_come_once() -> None:
    assert [entry.name for entry in entries_of(["curves", "leg+", "curves"])] == ["curves", "leg+"]
