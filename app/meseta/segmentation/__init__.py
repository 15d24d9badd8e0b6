"""Noise model, change points, plateaus, measures of every trace."""

from meseta.segmentation.change_points import optimal_partition, partition_cost
from meseta.segmentation.expectation import expect
from meseta.segmentation.expected import Expectation
from meseta.segmentation.finder import find_plateaus
from meseta.segmentation.measures import measure_traces
from meseta.segmentation.noise import NoiseStatistics, noise_block, noise_model
from meseta.segmentation.results import PLATEAU_KINDS, NoiseModel, PlateauTable, TraceMeasures
from meseta.segmentation.sheet_choice import choose_traces

__all__ = [
    "PLATEAU_KINDS",
    "Expectation",
    "NoiseModel",
    "NoiseStatistics",
    "PlateauTable",
    "TraceMeasures",
    "choose_traces",
    "expect",
    "find_plateaus",
    "measure_traces",
    "noise_block",
    "noise_model",
    "optimal_partition",
    "partition_cost",
]
