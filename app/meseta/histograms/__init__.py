"""Count matrix, 1D, 2D, correlation, temporal and length histograms, comparisons, resampling."""

from meseta.histograms.advice import bin_notes, proposed_width
from meseta.histograms.comparison import Difference, Yield, difference, hits_in_window, molecular_yield
from meseta.histograms.conditional import ConditionalHistogram, conditional_histogram, passes_more_than_usual
from meseta.histograms.correlation import correlation_histogram
from meseta.histograms.counting import count_traces, with_bins
from meseta.histograms.displacement import displacement_counts, displacement_edges, displacement_of_selection
from meseta.histograms.distribution import conductance_histogram
from meseta.histograms.lengths import LengthHistogram, Spacing, Survival, plateau_lengths, spacing_of
from meseta.histograms.plateaus import plateau_histogram
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
    Ridge,
)
from meseta.histograms.temporal import (
    Drift,
    RecordMemory,
    TemporalHistogram,
    drift_of,
    record_memory,
    shifted_correlation,
    temporal_histogram,
)

__all__ = [
    "EXCLUDED",
    "ConditionalHistogram",
    "ConductanceHistogram",
    "CorrelationHistogram",
    "CountMatrix",
    "Difference",
    "DisplacementHistogram",
    "Drift",
    "Grid",
    "HistogramTable",
    "LengthHistogram",
    "RecordMemory",
    "Resampling",
    "Ridge",
    "Spacing",
    "Survival",
    "TemporalHistogram",
    "Yield",
    "bin_notes",
    "conditional_histogram",
    "conductance_histogram",
    "correlation_histogram",
    "count_traces",
    "difference",
    "displacement_counts",
    "displacement_edges",
    "displacement_of_selection",
    "drift_of",
    "hits_in_window",
    "molecular_yield",
    "passes_more_than_usual",
    "plateau_histogram",
    "plateau_lengths",
    "proposed_width",
    "record_memory",
    "resample",
    "shifted_correlation",
    "spacing_of",
    "temporal_histogram",
    "with_bins",
]
