"""Zero of displacement: where each trace crosses the alignment level."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

__all__ = ["ALIGNMENT_STATUS", "Alignment"]

ALIGNMENT_STATUS: Final = ("aligned", "never reaches the level", "ends above the level", "no samples in this phase")


@dataclass(frozen=True)
class Alignment:
    """The zero of displacement of every trace.

    Attributes
    ----------
    zero_drive : (traces,) float64
        Drive value (absolute, in the drive's unit) at the zero; NaN where the trace has none.
    zero_sample : (traces,) int64
        Last sample at or above the level before the crossing; -1 where the trace has none.
    status : (traces,) uint8
        Place in :data:`ALIGNMENT_STATUS`.
    level_g0 : float
        The alignment level.
    """

    zero_drive: npt.NDArray[np.float64]
    zero_sample: npt.NDArray[np.int64]
    status: npt.NDArray[np.uint8]
    level_g0: float

    def block(self, first: int, last: int) -> Alignment:
        """Return the rows of traces ``first`` to ``last``."""
        rows = slice(first, last)
        return Alignment(self.zero_drive[rows], self.zero_sample[rows], self.status[rows], self.level_g0)
