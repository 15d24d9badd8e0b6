"""Line shapes, peak fits, series resistance, decay constant."""

from meseta.peaks.calibration import CalibrationShifts, calibration_shifts
from meseta.peaks.decay import Decay, DecayPoints, decay
from meseta.peaks.fit import fit_histogram
from meseta.peaks.formation import Formation, formation_probability
from meseta.peaks.meaning import assignment, channels_at_least
from meseta.peaks.points import read_points
from meseta.peaks.published import PublishedValue, published
from meseta.peaks.resistance import SeriesResistance, series_resistance
from meseta.peaks.results import PeakFit, PeakTable
from meseta.peaks.spread import AnalysisSpread, DefensibleAnalyses, defensible_analyses
from meseta.peaks.windows import Floor

__all__ = [
    "AnalysisSpread",
    "CalibrationShifts",
    "Decay",
    "DecayPoints",
    "DefensibleAnalyses",
    "Floor",
    "Formation",
    "PeakFit",
    "PeakTable",
    "PublishedValue",
    "SeriesResistance",
    "assignment",
    "calibration_shifts",
    "channels_at_least",
    "decay",
    "defensible_analyses",
    "fit_histogram",
    "formation_probability",
    "published",
    "read_points",
    "series_resistance",
]
