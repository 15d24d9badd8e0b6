"""What a simulation hands on: the traces, the exact truth, and the parameters it was made with."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.tables import Table
from meseta.traces import TraceSet

__all__ = ["LABELS", "RawSimulation", "RawTruthTable", "RecordedVolts", "Simulation", "TruthTable"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

LABELS: Final = ("", "first", "second")
"""Labels of the molecular plateaus of a mixture; empty everywhere else."""


@dataclass(frozen=True)
class TruthTable(Table):
    """One row a true plateau, sorted by trace, then start.

    ``start``/``stop`` is the half-open range of samples in which the noiseless reading, after the amplifier's filter,
    lies within 5 % of the plateau's own conductance (a molecular plateau thus begins where the tunnelling current
    beside it has died away).  ``kind`` is "metal" or "molecule"; ``level_g0`` the mean conductance of the junction over
    the range, without noise and without series resistance; ``slope_decades_per_nm`` that of the plateau; ``label`` one
    of :data:`LABELS`.
    """

    trace: Integers
    start: Integers
    stop: Integers
    kind: npt.NDArray[np.str_]
    level_g0: Floats
    slope_decades_per_nm: Floats
    label: npt.NDArray[np.str_]


@dataclass(frozen=True)
class RawTruthTable(TruthTable):
    """The truth of a continuous recording: ``trace`` counts the openings.

    ``record_start`` is the first raw sample of the opening, ``raw_start``/``raw_stop`` the plateau's range in raw
    samples (``record_start + start`` and ``record_start + stop``).
    """

    record_start: Integers
    raw_start: Integers
    raw_stop: Integers


@dataclass(frozen=True)
class Simulation:
    """Simulated traces with their truth.

    Attributes
    ----------
    traces : TraceSet
        Conductance in G0, displacement in nm.
    truth : TruthTable
    labels : (traces,) str
        What bridged the gap of each trace: "none", or "molecule", "first", "second".
    parameters : mapping
        Calibration, settings, and population parameters; ``peaks`` lists the true population peak positions.
    """

    traces: TraceSet
    truth: TruthTable
    labels: npt.NDArray[np.str_]
    parameters: Mapping[str, Any]


@dataclass(frozen=True)
class RecordedVolts:
    """One recorded channel: integers of the converter; volts = stored * scale + offset."""

    name: str
    role: str
    values: npt.NDArray[Any]
    scale: float
    offset: float
    unit: str = "V"

    def volts(self) -> Floats:
        """Return the channel in volts."""
        return self.values.astype(np.float64) * self.scale + self.offset


@dataclass(frozen=True)
class RawSimulation:
    """One continuous recording as amplifier and piezo volts, with its truth.

    Attributes
    ----------
    channels : tuple of RecordedVolts
        Piezo, amplifier, and the second amplifier where there is one.
    opening_start, opening_stop : (openings,) int64
        Raw samples of each pull.
    truth : RawTruthTable
    labels : (openings,) str
        As in :class:`Simulation`.
    parameters : mapping
        As in :class:`Simulation`.
    """

    channels: tuple[RecordedVolts, ...]
    opening_start: Integers
    opening_stop: Integers
    truth: RawTruthTable
    labels: npt.NDArray[np.str_]
    parameters: Mapping[str, Any]

    def channel(self, role: str) -> RecordedVolts:
        """Return the channel with this role."""
        return next(channel for channel in self.channels if channel.role == role)
