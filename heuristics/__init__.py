"""What a seat is worth on its own leg: classical protection levels and their displacement-adjusted form.

Littlewood's rule, EMSR-a and EMSR-b and the optimal nested levels work on the fare classes of one leg.
`leg_products` ranks the products of every leg by displacement-adjusted fare, from bid prices that come as an
array; `leg_protection` turns that into protection levels, booking limits and seat values of all legs. Nothing
here calls a solver.
"""

from heuristics.displacement import LegProducts, leg_products
from heuristics.emsr import emsr_a, emsr_b
from heuristics.littlewood import littlewood_level
from heuristics.nested import NestedLevels, optimal_levels
from heuristics.protection import LegControl, LegProtection, leg_protection, seat_value_curve
from heuristics.virtual import virtual_classes

__all__ = [
    "LegControl",
    "LegProducts",
    "LegProtection",
    "NestedLevels",
    "emsr_a",
    "emsr_b",
    "leg_products",
    "leg_protection",
    "littlewood_level",
    "optimal_levels",
    "seat_value_curve",
    "virtual_classes",
]
