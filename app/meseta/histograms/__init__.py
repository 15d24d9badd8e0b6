"""Count matrix, 1D, 2D, correlation and length histograms, resampling."""

from meseta.histograms.correlation import correlation_histogram
from meseta.histograms.counting import count_traces, with_bins
from meseta.histograms.displacement import displacement_counts, displacement_of_selection
from meseta.histograms.distribution import conductance_histogram
from meseta.histograms.resampling import resample
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
    "conductance_histogram",
    "correlation_histogram",
    "count_traces",
    "displacement_counts",
    "displacement_of_selection",
    "resample",
    "with_bins",
]
