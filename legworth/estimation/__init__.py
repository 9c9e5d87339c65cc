"""Demand to come from booking history: unconstraining, pick-up, shrinkage, adjustments, backtest.

`estimate_folder` is the recipe that the command runs; `estimate_demand` is the estimate alone.
"""

from legworth.estimation.backtest import BacktestOptions, run_backtest
from legworth.estimation.estimate import DemandEstimate, DemandOptions, Pools, estimate_demand, fit_demand, forecast
from legworth.estimation.history import BookingHistory
from legworth.estimation.history_table import read_history
from legworth.estimation.recipe import EstimateOptions, estimate_folder
from legworth.estimation.scores import score_backtest

__all__ = [
    "BacktestOptions",
    "BookingHistory",
    "DemandEstimate",
    "DemandOptions",
    "EstimateOptions",
    "Pools",
    "estimate_demand",
    "estimate_folder",
    "fit_demand",
    "forecast",
    "read_history",
    "run_backtest",
    "score_backtest",
]
