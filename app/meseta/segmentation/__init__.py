"""Noise model, change points, plateaus, measures of every trace."""

from meseta.segmentation.results import PLATEAU_KINDS, NoiseModel, PlateauTable, TraceMeasures

__all__ = ["PLATEAU_KINDS", "NoiseModel", "PlateauTable", "TraceMeasures"]
