"""Line shapes, peak fits, series resistance, decay constant."""

from meseta.peaks.fit import fit_histogram
from meseta.peaks.results import PeakFit, PeakTable
from meseta.peaks.windows import Floor

__all__ = ["Floor", "PeakFit", "PeakTable", "fit_histogram"]
