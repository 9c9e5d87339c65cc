"""Does it earn more? Whole booking horizons played under several controls, on the same requests, with bounds.

`simulate` is the way in. Requests are drawn in `requests`, controls are made in `methods` and speak through `rules`,
the inner loop is `play`, and `study` is the recipe.
"""

from legworth.simulation.bounds import Bound
from legworth.simulation.forecast import STRESSES, Stress
from legworth.simulation.methods import METHODS
from legworth.simulation.settings import BASELINE, REOPTIMISED, STANDARD, SimulationOptions
from legworth.simulation.study import Simulation, simulate
from legworth.simulation.table import result_table

__all__ = [
    "BASELINE",
    "METHODS",
    "REOPTIMISED",
    "STANDARD",
    "STRESSES",
    "Bound",
    "Simulation",
    "SimulationOptions",
    "Stress",
    "result_table",
    "simulate",
]
