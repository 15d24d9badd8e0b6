"""Files -> TraceSet: readers, calibration, cutting, alignment."""

from meseta.intake.alignment import ALIGNMENT_STATUS, Alignment, align

__all__ = ["ALIGNMENT_STATUS", "Alignment", "align"]
