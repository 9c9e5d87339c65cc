"""What is sold: tables, route graph, demand to come, and one `Network` of ordered arrays."""

from network.counted import counted
from network.demand import Demand, Family
from network.errors import (
    InputError,
    LegworthError,
    NotCertifiedError,
    SettingError,
    SolveError,
    SolverMissingError,
    SolverStoppedError,
)
from network.faults import Fault, Faults
from network.folder import ReadResult, read_folder
from network.graph import Component, components, route_graph
from network.model import BookingCurves, Legs, Network, Stations
from network.schema import TableSchema, input_schemas, table_schema

__all__ = [
    "BookingCurves",
    "Component",
    "Demand",
    "Family",
    "Fault",
    "Faults",
    "InputError",
    "Legs",
    "LegworthError",
    "Network",
    "NotCertifiedError",
    "ReadResult",
    "SettingError",
    "SolveError",
    "SolverMissingError",
    "SolverStoppedError",
    "Stations",
    "TableSchema",
    "components",
    "counted",
    "input_schemas",
    "read_folder",
    "route_graph",
    "table_schema",
]
