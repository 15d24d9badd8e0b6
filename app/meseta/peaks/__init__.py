"""Line shapes, peak fits, series resistance, decay constant.

For a peak editor: :func:`editable_peaks` gives the peaks to edit (of the settings, else of the fit) as ``PeakStart``,
:func:`edited_peaks` turns edited ones and their ties into ``PeakSettings``, or says in one sentence what does not go
together.  Both are pure.  A :class:`PeakFit` has ``residuals`` (observed less fitted density), ``scaled_residuals`` (in
units of ``scatter``, the standard deviation over resampled data sets) and ``systematic_table()`` (one row a peak and
choice).  :class:`DefensibleAnalyses` gives ``of_peak(name)``, whose fields are the arguments of
``figures.analyses_figure``, and ``spread()``.
"""

from meseta.peaks.calibration import CalibrationErrors, CalibrationShifts, calibration_shifts
from meseta.peaks.decay import Decay, DecayPoints, decay
from meseta.peaks.editing import editable_peaks, edited_peaks
from meseta.peaks.fit import fit_histogram
from meseta.peaks.formation import Formation, formation_probability
from meseta.peaks.meaning import assignment, channels_at_least
from meseta.peaks.physics import PeakPhysics, peak_physics
from meseta.peaks.points import read_points
from meseta.peaks.published import PublishedValue, published
from meseta.peaks.resistance import SeriesResistance, series_resistance
from meseta.peaks.results import PeakFit, PeakTable, PositionShift, SystematicTable
from meseta.peaks.spread import AnalysisSpread, DefensibleAnalyses, PeakAnalyses, defensible_analyses
from meseta.peaks.systematic import OtherCounts
from meseta.peaks.windows import Floor

__all__ = [
    "AnalysisSpread",
    "CalibrationErrors",
    "CalibrationShifts",
    "Decay",
    "DecayPoints",
    "DefensibleAnalyses",
    "Floor",
    "Formation",
    "OtherCounts",
    "PeakAnalyses",
    "PeakFit",
    "PeakPhysics",
    "PeakTable",
    "PositionShift",
    "PublishedValue",
    "SeriesResistance",
    "SystematicTable",
    "assignment",
    "calibration_shifts",
    "channels_at_least",
    "decay",
    "defensible_analyses",
    "editable_peaks",
    "edited_peaks",
    "fit_histogram",
    "formation_probability",
    "peak_physics",
    "published",
    "read_points",
    "series_resistance",
]
