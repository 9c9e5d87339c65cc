"""Methods side by side on one history: the same departures, the same weights, and what the sentences claim."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from legworth.estimation.censored_sample import CensoredSample, EmOptions
from legworth.estimation.demand_fit import fit_demand
from legworth.estimation.demand_options import DemandOptions
from legworth.estimation.history import BookingHistory
from legworth.estimation.increments import Increments
from legworth.estimation.method_comparison import BOOKED, ESTIMATE, MethodComparison, compare_methods, usual_days
from legworth.estimation.method_report import method_notes, method_rows, methods_table, share_rows
from legworth.estimation.unconstraining import METHODS, ClassSamples, unconstrain
from tests.legworth.estimation.drawn import CLASSES, Drawn, draw_history
from tools import demo_scenario as world
from tools.history_truth import mean_truth, naive_means
from tools.make_demo_history import demo_plan, read_service_day, service_day
from tools.simulated_history import SimulatedHistory, simulate_history

FITTED = ("projection", "normal", "poisson", "negative_binomial")
ALIKE = DemandOptions(half_life=None)


def compared(drawn: Drawn, history: BookingHistory | None = None, options: DemandOptions = ALIKE) -> MethodComparison:
    """Methods on all departures of a drawn history."""
    history = drawn.history if history is None else history
    fit = fit_demand(history, drawn.pools, history.departure.max() + 1, options)
    found = compare_methods(history, fit)
    assert found is not None
    return found


def without(history: BookingHistory, gone: np.ndarray) -> BookingHistory:
    """The history without some readings, where every series keeps one."""
    kept = ~gone
    length = np.add.reduceat(kept.astype(np.int64), history.start[:-1])
    return replace(
        history,
        start=np.append(0, np.cumsum(length)),
        days_before=history.days_before[kept],
        booked=history.booked[kept],
        cancelled=history.cancelled[kept],
        open=history.open[kept],
    )


@pytest.fixture(scope="module")
def carrier(tmp_path_factory: pytest.TempPathFactory) -> SimulatedHistory:
    day = service_day(("ORV", "SAL", "BRO"))
    network = read_service_day(day, tmp_path_factory.mktemp("day"))
    return simulate_history(demo_plan(network, world.AS_OF, 160))


def test_naive_methods_agree_with_averages_of_what_was_simulated(carrier: SimulatedHistory) -> None:
    """Worked out anew from the arrays of the simulation, as `benchmarks.estimate_truth` takes its plain average."""
    network, by = carrier.plan.network, carrier.plan.departure[-15]
    truth, fit = mean_truth(carrier, carrier.history(), by, ALIKE)
    found = compare_methods(carrier.history(), replace(fit, as_of=by + 1))
    assert found is not None
    past = carrier.plan.departure <= by
    came = np.diff(carrier.booked[past], axis=2, prepend=0).astype(np.float64)
    closed = carrier.open_share[past] < 1.0
    assert found.departures == came.shape[0] * came.shape[1]
    assert found.closed == closed.sum() > 1000
    assert found.closed_unbooked == (closed & (came == 0)).sum()
    booked = naive_means(carrier, by)["all departures"]
    for k in range(len(network.fare_classes)):
        mine = network.product_class == k
        assert found.booked.by_class[k] == pytest.approx(booked[mine].mean(), rel=1e-12)
        assert found.line("ignore").by_class[k] == pytest.approx(booked[mine].mean(), rel=1e-12)
        open_mean = np.nanmean(np.where(closed, np.nan, came)[:, mine], axis=(0, 1))
        assert found.line("discard").by_class[k] == pytest.approx(open_mean.sum(), rel=1e-9)
        filled = np.where(closed, np.maximum(came, open_mean), came)[:, mine]
        assert found.line("replace").by_class[k] == pytest.approx(filled.sum(axis=2).mean(), rel=1e-9)
        assert found.line(ESTIMATE).by_class[k] == pytest.approx(truth.estimated[mine].mean(), rel=1e-6)
    for line in (found.booked, found.line("ignore"), found.line("discard"), found.line("replace")):
        assert line.every < truth.true.mean()
    assert found.line(ESTIMATE).every == pytest.approx(truth.true.mean(), rel=0.05)


def test_without_a_closed_class_all_methods_are_the_plain_mean() -> None:
    """The sum of what was booked over departures; weekdays and missing readings make no difference."""
    drawn = draw_history(3, n_itineraries=12, n_dates=90, seats=None, weekday=True)
    history = drawn.history
    rng = np.random.default_rng(5)
    last = np.zeros(history.n_readings, dtype=bool)
    last[history.start[1:] - 1] = True
    gaps = without(history, (rng.random(history.n_readings) < 0.15) & ~last)
    plain = drawn.demand.sum(axis=3).mean(axis=(0, 2))
    for told in (history, gaps):
        found = compared(drawn, told)
        assert found.left_out == found.closed == found.pooled == 0
        for method in (BOOKED, *METHODS):
            assert found.line(method).by_class == pytest.approx(plain, rel=1e-10)
            assert found.line(method).every == pytest.approx(plain.mean(), rel=1e-10)
        assert found.line(ESTIMATE).by_class == pytest.approx(plain, rel=0.05)


def test_departures_count_by_their_age() -> None:
    """Where demand has doubled, the younger half has more weight: 0.5 ** (age / half-life), worked out here."""
    drawn = draw_history(4, n_itineraries=6, n_dates=80, seats=None)
    booked = drawn.demand.sum(axis=3).astype(np.float64)
    weight = 0.5 ** (np.arange(80, 0, -1) / 20.0)
    found = compared(drawn, options=DemandOptions(half_life=20.0))
    expected = (booked * weight).sum(axis=2).mean(axis=0) / weight.sum()
    for method in (BOOKED, *METHODS):
        assert found.line(method).by_class == pytest.approx(expected, rel=1e-9)
    assert found.booked.by_class != pytest.approx(booked.mean(axis=(0, 2)), rel=1e-3)


def test_departures_whose_readings_end_early_are_left_out_of_every_line() -> None:
    drawn = draw_history(6, n_itineraries=8, n_dates=60, seats=None)
    history = drawn.history
    early = np.arange(history.n_series) % 10 == 0
    gone = np.zeros(history.n_readings, dtype=bool)
    gone[history.start[1:][early] - 1] = True
    found = compared(drawn, without(history, gone))
    whole = history.booked[history.start[1:] - 1]
    assert found.left_out == early.sum()
    assert found.departures == (~early).sum()
    for k in range(len(CLASSES)):
        plain = whole[~early & (history.series_class == k)].mean()
        assert found.booked.by_class[k] == pytest.approx(plain, rel=1e-12)
        assert found.line("poisson").by_class[k] == pytest.approx(plain, rel=1e-9)


def test_readings_at_other_hours_for_every_product_fall_into_the_same_intervals() -> None:
    """Readings at one hour of the night lie at other parts of a day before departures at other hours."""
    drawn = draw_history(7, n_itineraries=10, n_dates=60, seats=0.9)
    history = drawn.history
    hour = np.linspace(0.02, 0.9, 10)[history.series_itinerary]
    shifted = replace(history, days_before=history.days_before + np.repeat(hour, np.diff(history.start)))
    days = usual_days(shifted, np.arange(shifted.n_series))
    assert len(np.unique(shifted.days_before)) == 130
    assert len(days) == 13
    assert np.all(np.diff(days) < 0)
    even, odd = compared(drawn), compared(drawn, shifted)
    assert odd.groups == even.groups == 39
    assert odd.left_out == 0
    for method in (BOOKED, *METHODS):
        assert odd.line(method).by_class == pytest.approx(even.line(method).by_class, rel=1e-9)


def test_usual_days_are_those_that_occur_where_departures_share_them() -> None:
    drawn = draw_history(1, n_itineraries=2, n_dates=20)
    assert usual_days(drawn.history, np.array([3, 9])).tolist() == [90, 60, 45, 30, 21, 14, 10, 7, 5, 3, 2, 1, 0]


def shut(drawn: Drawn, fare_class: int, cells: slice) -> BookingHistory:
    """The history with some intervals of a class closed and without bookings in them."""
    history = drawn.history
    came = np.diff(history.booked.reshape(-1, 13), axis=1, prepend=0.0)
    is_open = history.open.reshape(-1, 13).copy()
    mine = history.series_class == fare_class
    came[mine, cells], is_open[mine, cells] = 0.0, False
    return replace(history, booked=np.cumsum(came, axis=1).ravel(), open=is_open.ravel())


def test_a_class_that_was_never_open_has_no_figure_and_counts_nowhere() -> None:
    drawn = draw_history(8, n_itineraries=8, n_dates=60, seats=None)
    found = compared(drawn, shut(drawn, 2, slice(None)))
    assert found.never_open == ("C",)
    assert found.booked.by_class[2] == found.line(ESTIMATE).by_class[2] == 0.0
    for method in METHODS:
        line = found.line(method)
        assert np.isnan(line.by_class[2])
        assert line.every == pytest.approx(line.by_class[:2].mean(), rel=1e-9)
        assert line.every == pytest.approx(found.booked.every, rel=1e-9)
    assert found.line(ESTIMATE).every == pytest.approx(found.line(ESTIMATE).by_class[:2].mean())
    assert any(note.startswith("Class C was closed") for note in method_notes(found))
    assert [row[-1] for row in method_rows(found)] == ["0.00", *[""] * 7, "0.00"]


def test_an_interval_that_was_never_open_takes_the_mean_of_its_class() -> None:
    drawn = draw_history(8, n_itineraries=8, n_dates=60, seats=None)
    found = compared(drawn, shut(drawn, 1, slice(4, 5)))
    assert found.pooled == 1
    assert found.never_open == ()
    came = drawn.demand[:, 1].reshape(-1, 13).astype(np.float64)
    rest = np.delete(came, 4, axis=1)
    assert found.line("discard").by_class[1] == pytest.approx(rest.sum(axis=1).mean() + rest.mean(), rel=1e-9)
    assert found.line("discard").by_class[[0, 2]] == pytest.approx(found.booked.by_class[[0, 2]], rel=1e-9)
    assert any("39 samples in all, 1 of them never open throughout" in note for note in method_notes(found))


def test_nothing_is_compared_before_a_departure_has_left() -> None:
    drawn = draw_history(2, n_itineraries=4, n_dates=30)
    first = drawn.history.departure.min()
    fit = fit_demand(drawn.history, drawn.pools, first, ALIKE)
    assert compare_methods(drawn.history, fit) is None


def test_closed_by_others_makes_methods_too_high() -> None:
    """What the page says: the class closes at any instant of an interval whatever its own demand; mean 2."""
    rng = np.random.default_rng(9)
    mean, size = 2.0, 60_000
    part = np.where(rng.random(size) < 0.4, rng.random(size), 1.0)
    seen, closed = rng.poisson(mean * part).astype(float), part < 1.0
    sample = CensoredSample.of(seen, closed)
    for method in FITTED:
        assert unconstrain(sample, method).mean[0] > mean * 1.05
    assert seen.sum() / part.sum() == pytest.approx(mean, rel=0.02)


def test_one_sample_of_unlike_products_makes_methods_too_low() -> None:
    """What the page says against that: the busier of two products is closed more often, here from the beginning."""
    rng = np.random.default_rng(10)
    size = 40_000
    mean = np.repeat([0.5, 4.0], size)
    closed = rng.random(2 * size) < np.repeat([0.0, 0.6], size)
    seen = np.where(closed, 0, rng.poisson(mean)).astype(float)
    for method in ("poisson", "negative_binomial"):
        assert unconstrain(CensoredSample.of(seen, closed), method).mean[0] < mean.mean() * 0.9
        apart = unconstrain(CensoredSample.of(seen, closed, (mean > 1).astype(int), 2), method)
        assert apart.mean == pytest.approx([0.5, 4.0], rel=0.03)


def test_weights_count_observations() -> None:
    rng = np.random.default_rng(11)
    seen, closed = rng.poisson(3.0, 300).astype(float), rng.random(300) < 0.3
    times = rng.integers(1, 4, 300)
    weighed = CensoredSample.of(seen, closed, weight=times)
    repeated = CensoredSample.of(np.repeat(seen, times), np.repeat(closed, times))
    assert weighed.size == repeated.size == times.sum()
    halves = CensoredSample.of(seen + 0.5, closed, weight=times)
    assert (halves.value == weighed.value + 0.5).all()
    assert (halves.weight == weighed.weight).all()
    for method in METHODS:
        assert unconstrain(weighed, method).mean == pytest.approx(unconstrain(repeated, method).mean, rel=1e-9)
    pooled = CensoredSample.of(seen, closed, np.arange(300) % 7, 7, times).pooled()
    assert (pooled.weight == weighed.weight).all()
    for wrong in (0.0, -1.0, np.nan):
        with pytest.raises(ValueError, match="weights"):
            CensoredSample.of([1.0], [False], weight=[wrong])
    with pytest.raises(ValueError, match="shapes"):
        CensoredSample.of([1.0], [False], weight=[1.0, 2.0])


def test_samples_that_do_not_settle_are_told() -> None:
    drawn = draw_history(1, n_itineraries=8, n_dates=60, seats=0.8)
    increments = Increments.of(drawn.history)
    samples = ClassSamples.of(increments, drawn.history.series_class, 3)
    cut = samples.fit("normal", EmOptions(iterations=2))
    assert cut.rounds == 2
    assert 0 < cut.unsettled <= samples.groups
    found = compared(draw_history(1, n_itineraries=8, n_dates=60, seats=0.95))
    lines = tuple(
        replace(line, rounds=2, unsettled=cut.unsettled) if line.method == "normal" else line for line in found.lines
    )
    assert any(note.startswith("All iterations settled") for note in method_notes(found))
    told = method_notes(replace(found, lines=lines))
    assert any(note.startswith(f"normal, EM: {cut.unsettled} samples had not settled after 2") for note in told)
    assert not any(note.startswith("All iterations settled") for note in told)


def test_the_screen_shows_classes_where_there_is_room() -> None:
    found = compared(draw_history(1, n_itineraries=4, n_dates=40, seats=0.8))
    assert len(methods_table(found).columns) == 6
    many = tuple("ABCDEFGHI")
    wide = replace(
        found,
        fare_classes=many,
        lines=tuple(replace(line, by_class=np.resize(line.by_class, 9)) for line in found.lines),
    )
    assert len(methods_table(wide).columns) == 3
    assert all(len(row) == 3 + 9 for row in method_rows(wide))
    assert all(len(row) == 2 + 9 + 2 for row in share_rows(wide))
    with pytest.raises(KeyError):
        found.line("guess")
