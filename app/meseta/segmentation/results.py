"""What segmentation hands on: the noise model, the plateau table, the measures of every trace."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.tables import Table

__all__ = ["PLATEAU_KINDS", "NoiseModel", "PlateauTable", "TraceMeasures"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

PLATEAU_KINDS: Final = ("metal", "molecule")
"""Kinds in ``plateaus.csv``: "metal" at and above about one conductance quantum, "molecule" below."""


@dataclass(frozen=True)
class NoiseModel:
    """Noise of the recording, learnt from all traces, as a function of conductance.

    Attributes
    ----------
    floor_g0, floor_sigma_g0 : float
        Mean and standard deviation (single sample) of the reading with the contact open.  Where no trace reaches the
        floor, ``floor_g0`` is 0, ``floor_sigma_g0`` the noise of the lowest readings, ``floor_traces`` 0.
    floor_traces : int
        Number of traces that were shown to reach the floor.
    level_g0, sigma_g0, long_run_g0 : (k,) float64
        Conductance, standard deviation of a single sample, and long-run standard deviation (square root of the
        long-run variance a sample) there; interpolated in log G between, constant beyond.
    rise_samples : float
        Samples that the amplifier needs for a step (10 to 90 %).
    converter_step_g0 : float
        Step of the converter near the floor; 0 where none shows.
    saturation_g0 : float
        Highest conductance the amplifier shows; infinite where no pile-up shows.
    tunnelling_slope : float
        Median slope of the tunnelling decay in decades per drive unit (negative); NaN where none was seen.
    stated : tuple of str
        Names of the quantities that the recipe stated instead of the recording.
    white_g0 : (k,) float64
        Part of ``sigma_g0`` that is independent from sample to sample, at ``level_g0``.
    growing : (k,) bool
        Where the long-run noise still grows with the length it is taken over (1/f): no standard error is then stated.
    """

    floor_g0: float
    floor_sigma_g0: float
    floor_traces: int
    level_g0: Floats
    sigma_g0: Floats
    long_run_g0: Floats
    rise_samples: float
    converter_step_g0: float
    saturation_g0: float
    tunnelling_slope: float
    stated: tuple[str, ...] = ()
    white_g0: Floats = field(default_factory=lambda: np.empty(0))
    growing: npt.NDArray[np.bool_] = field(default_factory=lambda: np.empty(0, np.bool_))

    def sigma(self, conductance_g0: npt.ArrayLike) -> Floats:
        """Return the standard deviation of a single sample at the given conductance, in G0."""
        return self._between(conductance_g0, self.sigma_g0)

    def long_run(self, conductance_g0: npt.ArrayLike) -> Floats:
        """Return the long-run standard deviation a sample at the given conductance, in G0."""
        return self._between(conductance_g0, self.long_run_g0)

    def _between(self, conductance_g0: npt.ArrayLike, values: Floats) -> Floats:
        level = np.log(self.level_g0)
        at = np.log(np.maximum(np.asarray(conductance_g0, float), self.level_g0[0]))
        result: Floats = np.exp(np.interp(at, level, np.log(values)))
        return result


@dataclass(frozen=True)
class PlateauTable(Table):
    """One row a plateau, sorted by trace, then start: the columns of ``plateaus.csv``.

    ``trace`` is the row in the TraceSet, ``start``/``stop`` the half-open sample range within the trace.  Drive columns
    are in the drive's unit; the ``_nm`` columns are NaN where the drive is not in nm.  ``displacement_*`` counts from
    the zero of displacement where the trace has one, else from the trace's start (``aligned`` tells).

    ``level_g0`` is the plateau conductance (mean current over the inner samples, less the floor's), ``level_sigma_g0``
    its standard error (NaN where the long-run variance is not finite),
    ``slope_decades_per_nm`` a least-squares slope of log10 G,
    ``noise_decades`` the robust spread of log10 G about that slope, ``kind`` one of :data:`PLATEAU_KINDS`,
    ``censored`` "" or what cut the plateau ("ramp", "floor", "saturation", "gap"), ``number`` counts plateaus in
    the trace from the last one (1 = last), ``score`` lies in 0..1,
    ``jump_before_decades``/``jump_after_decades`` are NaN at the end of a trace and at a gap, ``telegraph`` is true for
    a plateau that switches between close levels.  ``missing_samples`` counts samples within the plateau that are
    missing or not trusted (they have no weight), ``longest_gap_samples`` the longest run of them; a plateau neither
    begins nor ends with one, and none is longer than five times the shortest plateau.
    """

    trace: Integers
    start: Integers
    stop: Integers
    displacement_start_nm: Floats
    displacement_stop_nm: Floats
    length_nm: Floats
    level_g0: Floats
    slope_decades_per_nm: Floats
    noise_decades: Floats
    kind: npt.NDArray[np.str_]
    censored: npt.NDArray[np.str_]
    length_drive: Floats
    drive_unit: npt.NDArray[np.str_]
    aligned: npt.NDArray[np.bool_]
    level_sigma_g0: Floats
    effective_samples: Floats
    jump_before_decades: Floats
    jump_after_decades: Floats
    number: Integers
    score: Floats
    telegraph: npt.NDArray[np.bool_]
    missing_samples: Integers
    longest_gap_samples: Integers

    @classmethod
    def joined(cls, parts: Sequence[PlateauTable], first_traces: Sequence[int]) -> PlateauTable:
        """Return the tables of consecutive blocks as one; ``first_traces`` are the blocks' first trace numbers."""
        moved = [replace(p, trace=p.trace + first) for p, first in zip(parts, first_traces, strict=True)]
        return cls.concatenate(moved) if moved else cls.empty()

    @classmethod
    def empty(cls) -> PlateauTable:
        """Return a table without rows."""
        kinds: dict[str, Any] = {"Integers": np.int64, "Floats": np.float64}
        return cls(
            **{
                name: np.empty(0, kinds.get(str(kind), np.str_ if "str_" in str(kind) else np.bool_))
                for name, kind in cls.__annotations__.items()
            }
        )


@dataclass(frozen=True)
class TraceMeasures(Table):
    """One row a trace: what rules, figures and tables ask of a trace.

    Attributes
    ----------
    drive_span, rupture_drive : (traces,) float64
        Span of the drive, NaN where the trace has none of the measured phases; drive at the rupture (zero of
        displacement) counted from the trace's start, NaN where no rupture was found.
    rupture_found, reaches_floor, reforms : (traces,) bool
        Whether the contact broke at the alignment level, came to the floor, and closed again after the rupture.
    highest_g0, lowest_g0 : (traces,) float64
        Robust highest (before the rupture) and lowest reading.
    crossing_length : (traces,) float64
        Length by level crossing: drive between the last crossing of the upper and the last crossing of the lower bound
        of ``lengths``, in the drive's unit; NaN where either is not crossed.
    tunnelling_slope : (traces,) float64
        Least-squares slope of log10 G after the rupture, clear of contact and floor, decades per drive unit; NaN where
        too few samples.
    apparent_barrier_ev : (traces,) float64
        Height in eV of the square barrier that has the tunnelling slope; NaN where ``barrier_refused`` says why.
    barrier_refused : (traces,) str
        Why there is no apparent barrier; "" where there is one.
    floor_noise_g0 : (traces,) float64
        Standard deviation of the trace's samples at the floor; NaN where it does not reach it.
    saturated_samples, missing_samples : (traces,) int64
        Samples flagged saturated; samples that are NaN.
    """

    drive_span: Floats
    rupture_drive: Floats
    rupture_found: npt.NDArray[np.bool_]
    reaches_floor: npt.NDArray[np.bool_]
    reforms: npt.NDArray[np.bool_]
    highest_g0: Floats
    lowest_g0: Floats
    crossing_length: Floats
    tunnelling_slope: Floats
    apparent_barrier_ev: Floats
    barrier_refused: npt.NDArray[np.str_]
    floor_noise_g0: Floats
    saturated_samples: Integers
    missing_samples: Integers
