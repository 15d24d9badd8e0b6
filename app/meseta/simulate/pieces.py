"""From junctions in nanometres to pieces in samples, which the kernels draw."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.simulate.junctions import Junctions
from meseta.simulate.settings import SimulationSettings

__all__ = ["METAL", "MOLECULE", "NOTHING", "Pieces", "opening_pieces"]

Floats = npt.NDArray[np.float64]
NOTHING, METAL, MOLECULE = 0, 1, 2


@dataclass(frozen=True)
class Pieces:
    """Stretches of each trace in which log10 G of the junction and of the tunnelling gap run straight.

    All (traces, pieces).  ``stop`` counts samples within the trace and never falls; a piece without samples is left
    out.  ``log10_g0`` and ``tunnel_log10_g0`` hold at the piece's first sample (-inf: no such conductance), the slopes
    are in decades a sample.  ``relative`` is the standard deviation of the 1/f noise.
    """

    stop: npt.NDArray[np.int64]
    log10_g0: Floats
    slope: Floats
    tunnel_log10_g0: Floats
    tunnel_slope: Floats
    relative: Floats
    kind: npt.NDArray[np.uint8]
    label: npt.NDArray[np.uint8]

    def take(self, rows: slice) -> Pieces:
        """Return the pieces of some traces."""
        return Pieces(**{name: np.ascontiguousarray(value[rows]) for name, value in vars(self).items()})


def opening_pieces(junctions: Junctions, settings: SimulationSettings) -> Pieces:
    """Return the pieces of one opening a trace: the staircase, the bridge, and the rest of the trace open."""
    step, levels = settings.nm_per_sample, settings.levels
    stair, bridge = junctions.staircase, junctions.bridge
    traces, contacts = stair.level_g0.shape
    lengths = np.concatenate([stair.length_nm, bridge.length_nm[:, None]], axis=1)
    stop = np.concatenate(
        [np.rint(np.cumsum(lengths, axis=1) / step), np.full((traces, 1), settings.samples)], axis=1
    ).astype(np.int64)
    stop = np.minimum(stop, settings.samples)
    start = np.concatenate([np.zeros((traces, 1), np.int64), stop[:, :-1]], axis=1)
    slope = np.zeros(stop.shape)
    slope[:, :contacts] = stair.slope_decades_per_nm * step
    slope[:, contacts] = bridge.slope_decades_per_nm * step
    middle = np.full(stop.shape, -np.inf)
    middle[:, :contacts] = np.log10(stair.level_g0)
    middle[:, contacts] = bridge.log10_g0
    whole = np.rint(np.concatenate([lengths, np.zeros((traces, 1))], axis=1) / step)
    tunnel_slope = -junctions.decades_per_nm * step
    rupture = start[:, contacts][:, None]
    tunnel = -(junctions.decades_per_nm * junctions.gap_nm)[:, None] + tunnel_slope[:, None] * (start - rupture)
    tunnel[:, :contacts] = -np.inf
    relative = np.full(stop.shape, levels.relative_noise)
    relative[:, contacts] = np.where(bridge.length_nm > 0, levels.molecule_noise, levels.tunnelling_noise)
    relative[:, contacts + 1] = levels.tunnelling_noise
    kind = np.full(stop.shape, METAL, np.uint8)
    kind[:, contacts], kind[:, contacts + 1] = MOLECULE, NOTHING
    label = np.zeros(stop.shape, np.uint8)
    label[:, contacts] = bridge.label
    return Pieces(
        stop,
        middle - slope * np.maximum(whole - 1, 0) / 2,
        slope,
        tunnel,
        np.broadcast_to(tunnel_slope[:, None], stop.shape).copy(),
        relative,
        kind,
        label,
    )
