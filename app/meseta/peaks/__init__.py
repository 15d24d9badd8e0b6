"""Line shapes, peak fits, series resistance, decay constant."""

from meseta.peaks.fit import fit_histogram
from meseta.peaks.results import PeakFit, PeakTable

__all__ = ["PeakFit", "PeakTable", "fit_histogram"]
