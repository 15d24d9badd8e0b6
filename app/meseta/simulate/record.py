"""How the junctions change while the record runs: drift, memory from trace to trace, specimens."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.simulate.kernels import remembered
from meseta.simulate.settings import SimulationSettings
from meseta.simulate.streams import stream

__all__ = ["Draw", "Record", "record_of"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Record:
    """What the place in the record does to each trace.

    Attributes
    ----------
    level_memory, bridge_memory : (traces,) float64
        Stationary first-order autoregressive normals, unit variance: the remembered parts of a junction's conductance
        and of whether a molecule is caught.
    shift_decades : (traces,) float64
        Drift (from -1/2 to +1/2 of it over the record, so that the mean stays) plus the specimen's own shift.
    specimen : (traces,) int64
    """

    level_memory: Floats
    bridge_memory: Floats
    shift_decades: Floats
    specimen: npt.NDArray[np.int64]

    def block(self, first: int, last: int) -> Record:
        """Return the rows of traces ``first`` to ``last``."""
        rows = slice(first, last)
        return Record(self.level_memory[rows], self.bridge_memory[rows], self.shift_decades[rows], self.specimen[rows])


def record_of(settings: SimulationSettings, traces: int, padded: int, key: int) -> Record:
    """Return the record of ``traces`` traces, continued to ``padded`` rows so that the last block is whole."""
    rng = stream(key, "record", 0)
    offsets = settings.specimen_decades * rng.standard_normal(settings.specimens)
    innovations = rng.standard_normal((padded, 2))
    kept = np.exp(-1.0 / settings.memory_traces) if settings.memory_traces > 0 else 0.0
    place = np.minimum(np.arange(padded), traces - 1)
    specimen = place * settings.specimens // traces
    shift = settings.drift_decades * (place / max(traces - 1, 1) - 0.5)
    if settings.specimens > 1:
        shift = shift + offsets[specimen]
    return Record(
        remembered(np.ascontiguousarray(innovations[:, 0]), kept),
        remembered(np.ascontiguousarray(innovations[:, 1]), kept),
        shift,
        specimen.astype(np.int64),
    )


@dataclass(frozen=True)
class Draw:
    """What a kind draws its junctions from: a random stream, the settings and the place in the record."""

    rng: np.random.Generator
    settings: SimulationSettings
    record: Record

    @property
    def traces(self) -> int:
        """Number of traces to draw."""
        return len(self.record.shift_decades)

    def partly_remembered(self, memory: Floats, columns: int) -> Floats:
        """Return (traces, columns) unit normals of which ``memory_share`` of the variance is remembered."""
        fresh = self.rng.standard_normal((self.traces, columns))
        if self.settings.memory_traces <= 0:
            return fresh
        share = self.settings.memory_share
        mixed: Floats = np.sqrt(1 - share) * fresh + np.sqrt(share) * memory[:, None]
        return mixed
