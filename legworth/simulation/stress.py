"""Stress: the same requests, and controls prepared from forecasts that are wrong."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from legworth.simulation.forecast import STRESSES
from legworth.simulation.settings import BASELINE, SimulationOptions
from legworth.simulation.study import Simulation, simulate
from legworth.simulation.table import confidence

__all__ = ["StressLine", "under_stress"]


@dataclass(frozen=True)
class StressLine:
    """How one control fared under one wrong forecast.

    Attributes
    ----------
    case, case_label
        The wrong forecast.
    method
        Name of the entry.
    revenue
        Mean revenue of a path, currency.
    difference, difference_low, difference_high
        Mean difference to leg-level control prepared from the same wrong forecast, and its 95 % interval, currency.
    difference_right
        The difference with the right forecast, on the same paths, currency.
    survives
        Share of that gain that is left; None where there was none to be sure of.
    """

    case: str
    case_label: str
    method: str
    revenue: float
    difference: float
    difference_low: float
    difference_high: float
    difference_right: float
    survives: float | None


def under_stress(found: Simulation, progress: Callable[[str, float, float], None] | None = None) -> list[StressLine]:
    """Play the paths of a simulation again under every wrong forecast.

    Only entries whose rules serve all paths take part, and curves are shifted only where there are any.

    Parameters
    ----------
    found
        The simulation with the right forecast.
    progress
        Called with the case at work, the work done on it and its work in all.
    """
    names = tuple(entry.name for entry in found.entries if not entry.path_by_path)
    options: SimulationOptions = replace(found.options, methods=names, reoptimised_paths=0)
    right = {name: confidence(found.tallies[name].revenue - found.tallies[BASELINE].revenue) for name in names}
    lines = []
    cases = {case: stress for case, stress in STRESSES.items() if stress.shift == 0 or len(found.network.curves)}
    for case, stress in cases.items():

        def told(done: float, total: float, case: str = case) -> None:
            if progress is not None:
                progress(case, done, total)

        wrong = simulate(found.network, options, stress, told)
        base = wrong.tallies[BASELINE].revenue
        for name in names:
            revenue = wrong.tallies[name].revenue
            mean, low, high = confidence(revenue - base)
            gain, sure, _ = right[name]
            survives = mean / gain if sure > 0 else None
            lines.append(StressLine(case, stress.label, name, float(revenue.mean()), mean, low, high, gain, survives))
    return lines
