"""Line shapes, peak fits, series resistance, decay constant."""

from meseta.peaks.results import PeakFit, PeakTable

__all__ = ["PeakFit", "PeakTable"]
