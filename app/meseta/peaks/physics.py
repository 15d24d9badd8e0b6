"""What follows from the positions of peaks, and what is known of such positions from elsewhere."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.peaks.formation import Formation, formation_probability
from meseta.peaks.published import PublishedValue, published
from meseta.peaks.resistance import SeriesResistance, series_resistance
from meseta.peaks.results import PeakTable
from meseta.segmentation.results import PlateauTable

__all__ = ["PeakPhysics", "peak_physics"]

Floats = npt.NDArray[np.float64]

_FURTHEST: Final = 0.4
_QUANTUM_G0: Final = 0.6
_SUB_QUANTUM_G0: Final = 0.4
_MOST_PUBLISHED: Final = 2


@dataclass(frozen=True)
class PeakPhysics:
    """Physics of a peak table: reported beside it, never fed back.

    Attributes
    ----------
    resistance : SeriesResistance or None
        From the peaks near multiples of G0, with the unit fitted where there are two or more, else held at 1 G0; None
        where no peak is near one.
    resistance_peaks : tuple of str
        Names of those peaks.
    published : tuple of tuples of PublishedValue
        For each row of the table at most two published values within 0.1 decade, single values before wide
        ranges.
    formation : tuple of (Formation or None)
        For each row below 0.4 G0: share of the traces with a plateau within the full width at half maximum.
    """

    resistance: SeriesResistance | None
    resistance_peaks: tuple[str, ...]
    published: tuple[tuple[PublishedValue, ...], ...]
    formation: tuple[Formation | None, ...]

    def plain(self) -> dict[str, Any]:
        """Return everything as dict, list, str and numbers (NaN where unknown)."""
        resistance = None
        if self.resistance is not None:
            resistance = {
                name: value.tolist() if isinstance(value, np.ndarray) else value
                for name, value in asdict(self.resistance).items()
            } | {"peaks": list(self.resistance_peaks)}
        return {
            "series_resistance": resistance,
            "published": [[asdict(value) for value in near] for near in self.published],
            "formation": [None if one is None else asdict(one) for one in self.formation],
        }


def peak_physics(
    table: PeakTable, plateaus: PlateauTable | None = None, traces: int = 0, effective_traces: float = np.nan
) -> PeakPhysics:
    """Return what follows from a peak table.

    Parameters
    ----------
    table : PeakTable
    plateaus : PlateauTable, optional
        Accepted plateaus of the traces that take part.
    traces : int
        Traces that take part; 0 where junction formation is not asked for.
    effective_traces : float
        How many independent ones they are worth.
    """
    rows, number = _near_multiples(table)
    resistance = None
    if len(rows):
        position = table.position_g0[rows]
        sigma = (table.position_high_g0[rows] - table.position_low_g0[rows]) / 3.92
        known = sigma if (np.isfinite(sigma) & (sigma > 0)).all() else None
        resistance = series_resistance(position, known, number, unit_held=len(rows) < 2)
    return PeakPhysics(
        resistance,
        tuple(str(table.peak[row]) for row in rows),
        tuple(_nearest_published(float(g)) for g in table.position_g0),
        tuple(_formation(table, row, plateaus, traces, effective_traces) for row in range(len(table))),
    )


def _nearest_published(position_g0: float) -> tuple[PublishedValue, ...]:
    """Return the published values nearest to a position, single values before wide ranges."""

    def order(value: PublishedValue) -> float:
        return value.decades_away(position_g0) + float(np.log10(value.high_g0 / value.low_g0)) / 2

    near = published(position_g0) if np.isfinite(position_g0) else ()
    return tuple(sorted(near, key=order)[:_MOST_PUBLISHED])


def _near_multiples(table: PeakTable) -> tuple[npt.NDArray[np.int64], Floats]:
    """Return the rows near a multiple of G0, and the multiples; of two peaks near one multiple the nearer."""
    best: dict[int, tuple[float, int]] = {}
    for row, position in enumerate(table.position_g0):
        if not np.isfinite(position) or position < _QUANTUM_G0:
            continue
        number = max(round(float(position)), 1)
        away = abs(float(position) - number)
        if away <= _FURTHEST and away < best.get(number, (np.inf, 0))[0]:
            best[number] = (away, row)
    chosen = sorted(best)
    return np.array([best[number][1] for number in chosen], np.int64), np.array(chosen, float)


def _formation(
    table: PeakTable, row: int, plateaus: PlateauTable | None, traces: int, effective_traces: float
) -> Formation | None:
    position, fwhm = float(table.position_g0[row]), float(table.fwhm[row])
    if plateaus is None or not traces or not np.isfinite(position) or position >= _SUB_QUANTUM_G0:
        return None
    if str(table.axis[row]) == "logarithmic":
        low, high = position * 10 ** (-fwhm / 2), position * 10 ** (fwhm / 2)
    else:
        low, high = position - fwhm / 2, position + fwhm / 2
    inside = (plateaus.level_g0 >= low) & (plateaus.level_g0 <= high)
    share = min(effective_traces / traces, 1.0) if np.isfinite(effective_traces) and effective_traces > 0 else 1.0
    return formation_probability(len(np.unique(plateaus.trace[inside])), traces, independent_share=share)
