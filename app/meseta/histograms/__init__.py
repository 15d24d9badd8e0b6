"""Count matrix, 1D, 2D, correlation and length histograms, resampling."""

from meseta.histograms.results import (
    EXCLUDED,
    ConductanceHistogram,
    CorrelationHistogram,
    CountMatrix,
    DisplacementHistogram,
    Grid,
    HistogramTable,
    Resampling,
)

__all__ = [
    "EXCLUDED",
    "ConductanceHistogram",
    "CorrelationHistogram",
    "CountMatrix",
    "DisplacementHistogram",
    "Grid",
    "HistogramTable",
    "Resampling",
]
