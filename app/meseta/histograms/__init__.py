"""Count matrix, 1D, 2D, correlation, temporal and length histograms, comparisons, resampling.

Most results are steps of the analysis (``Analysis.result(name)``, see ``meseta.analysis.STEPS``).  What depends on a
question of the moment is a function here, given results of the analysis:

=============================  ========================================================================================
question                       function
=============================  ========================================================================================
a pair of bins                 :func:`pair_histograms` (from a map's :meth:`CorrelationHistogram.bins_at` and
                               :meth:`~CorrelationHistogram.range_g0`)
traces that satisfy something  :func:`conditional_histogram`
parts, or recordings           ``meseta.analysis.compare_parts``, ``compare_recordings``; then
                               :meth:`Comparison.difference`
a later trace                  :func:`shifted_map`
other tools                    :func:`content_of` (arrays with units), :func:`columns_of` (table), :func:`uhi_of`;
                               ``meseta.analysis.save_result`` writes CSV, HDF5 or npz
molecule and blank             :func:`molecular_yield` (``meseta.analysis.yield_in_window`` from two recordings)
=============================  ========================================================================================
"""

from meseta.histograms.advice import bin_notes, proposed_width
from meseta.histograms.comparison import (
    Comparison,
    Difference,
    Member,
    Part,
    compared,
    difference,
    members_of,
    parts_by,
)
from meseta.histograms.conditional import (
    ConditionalHistogram,
    PairHistograms,
    conditional_histogram,
    pair_histograms,
    passes_more_than_usual,
)
from meseta.histograms.content import Content, columns_of, content_of, uhi_of
from meseta.histograms.correlation import correlation_histogram
from meseta.histograms.counting import count_traces, with_bins
from meseta.histograms.displacement import (
    displacement_counts,
    displacement_edges,
    displacement_of_selection,
    displacement_zero,
)
from meseta.histograms.distribution import conductance_histogram
from meseta.histograms.lengths import LengthHistogram, Spacing, Survival, plateau_lengths, slope_histogram, spacing_of
from meseta.histograms.pairing import Partners, opening_closing_correlation, partner_rows
from meseta.histograms.plateaus import plateau_histogram
from meseta.histograms.resampling import resample, restricted
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
from meseta.histograms.shifted import Decay, ShiftedCorrelation, shifted_correlations, shifted_map
from meseta.histograms.temporal import (
    Drift,
    RecordMemory,
    TemporalHistogram,
    drift_of,
    record_memory,
    shifted_correlation,
    temporal_histogram,
)
from meseta.histograms.yields import Yield, hits_in_window, molecular_yield, window_efficiency

__all__ = [
    "EXCLUDED",
    "Comparison",
    "ConditionalHistogram",
    "ConductanceHistogram",
    "Content",
    "CorrelationHistogram",
    "CountMatrix",
    "Decay",
    "Difference",
    "DisplacementHistogram",
    "Drift",
    "Grid",
    "HistogramTable",
    "LengthHistogram",
    "Member",
    "PairHistograms",
    "Part",
    "Partners",
    "RecordMemory",
    "Resampling",
    "Ridge",
    "ShiftedCorrelation",
    "Spacing",
    "Survival",
    "TemporalHistogram",
    "Yield",
    "bin_notes",
    "columns_of",
    "compared",
    "conditional_histogram",
    "conductance_histogram",
    "content_of",
    "correlation_histogram",
    "count_traces",
    "difference",
    "displacement_counts",
    "displacement_edges",
    "displacement_of_selection",
    "displacement_zero",
    "drift_of",
    "hits_in_window",
    "members_of",
    "molecular_yield",
    "opening_closing_correlation",
    "pair_histograms",
    "partner_rows",
    "parts_by",
    "passes_more_than_usual",
    "plateau_histogram",
    "plateau_lengths",
    "proposed_width",
    "record_memory",
    "resample",
    "restricted",
    "shifted_correlation",
    "shifted_correlations",
    "shifted_map",
    "slope_histogram",
    "spacing_of",
    "temporal_histogram",
    "uhi_of",
    "window_efficiency",
    "with_bins",
]
