"""What is expected of the plateau finder, as one frozen result: efficiency, false plateaus, bias and limits."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError

__all__ = ["Expectation", "poisson_interval", "wilson_interval"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

NORMAL_95: Final = 1.959963984540054
CELLS: Final = (
    "planted",
    "found",
    "efficiency",
    "efficiency_low",
    "efficiency_high",
    "efficiency_error",
    "level_bias_decades",
    "length_bias",
)


@dataclass(frozen=True)
class Expectation:
    """Detection of planted plateaus over conductance and length, at the present settings.

    A planted plateau is found if one found plateau overlaps it by at least half of their union and its conductance lies
    within 0.1 decade.

    Attributes
    ----------
    conductance_g0 : (k,) float64
    length : (m,) float64
        In ``drive_unit``.
    slope_decades : float
        Slope of the planted plateaus, decades per drive unit.
    planted, found : (k, m) int64
    efficiency, efficiency_low, efficiency_high : (k, m) float64
        found / planted with the 95 % interval of Wilson (1927); NaN where none was planted.
    level_bias_decades, length_bias : (k, m) float64
        Median of found minus planted; NaN where none was found.
    limit_g0 : (m,) float64
        Lowest conductance from which on the efficiency is at least 0.9; NaN where there is none.
    false_a_trace, false_low, false_high : float
        Plateaus below 0.1 G0 found in the traces as they are, with the 95 % interval of a Poisson count; an upper bound
        where the traces are not known to be blank.
    traces : int
        Traces that took part.
    blank : bool
        Whether the traces were stated to be blank.
    """

    conductance_g0: Floats
    length: Floats
    drive_unit: str
    slope_decades: float
    planted: Integers
    found: Integers
    efficiency: Floats
    efficiency_low: Floats
    efficiency_high: Floats
    level_bias_decades: Floats
    length_bias: Floats
    limit_g0: Floats
    false_a_trace: float
    false_low: float
    false_high: float
    traces: int
    blank: bool

    def efficiency_at(self, conductance_g0: float, length: float) -> float:
        """Return the efficiency interpolated in log conductance and length; NaN beyond the grid."""
        return self._between(self.efficiency, conductance_g0, length)

    def efficiency_error_at(self, conductance_g0: float, length: float) -> float:
        """Return the standard error of :meth:`efficiency_at`; NaN beyond the grid."""
        return self._between(self.efficiency_error, conductance_g0, length)

    def _between(self, values: Floats, conductance_g0: float, length: float) -> float:
        from scipy.interpolate import RegularGridInterpolator

        between = RegularGridInterpolator((np.log10(self.conductance_g0), self.length), values, bounds_error=False)
        return float(between((np.log10(conductance_g0), length)))

    @property
    def efficiency_error(self) -> Floats:
        """Standard errors of the efficiencies: a quarter of the width of their 95 % intervals, (k, m)."""
        return (self.efficiency_high - self.efficiency_low) / (2 * NORMAL_95)

    def columns(self) -> dict[str, npt.NDArray[Any]]:
        """Return the grid as the columns of a table, one row a conductance and length."""
        level, length = np.meshgrid(self.conductance_g0, self.length, indexing="ij")
        cells = {"conductance_g0": level, "length": length}
        for name in CELLS:
            cells[name] = getattr(self, name)
        flat = {name: np.ravel(values) for name, values in cells.items()}
        flat["drive_unit"] = np.full(level.size, self.drive_unit)
        flat["slope_decades"] = np.full(level.size, self.slope_decades)
        return flat

    def plain(self) -> dict[str, Any]:
        """Return everything as plain values for JSON: lists, numbers, None where nothing can be told."""
        names = [field.name for field in fields(self)]
        return {name: _plain(getattr(self, name)) for name in [*names, "efficiency_error"]}

    @classmethod
    def from_plain(cls, values: Mapping[str, Any]) -> Expectation:
        """Return the result that :meth:`plain` was made of.

        Raises
        ------
        CallError
            Where an entry is missing or is not of its kind.
        """
        made: dict[str, Any] = {}
        try:
            for field in fields(cls):
                value, kind = values[field.name], str(field.type)
                if kind in ("Floats", "Integers"):
                    made[field.name] = np.array(value, np.float64).astype(np.int64 if kind == "Integers" else float)
                else:
                    made[field.name] = {"str": str, "bool": bool, "int": int}.get(kind, _number)(value)
        except (KeyError, TypeError, ValueError) as error:
            what = f"the expectation has no usable entry '{field.name}'"
            raise CallError(what, "expectation", "give what 'meseta expect --out' wrote") from error
        return cls(**made)


def _plain(value: Any) -> Any:
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, list):
        return [_plain(entry) for entry in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _number(value: Any) -> float:
    return math.nan if value is None else float(value)


def wilson_interval(found: Integers, planted: Integers) -> tuple[Floats, Floats]:
    """Return the 95 % score interval of a share (Wilson, J. Am. Stat. Assoc. 22, 209 (1927))."""
    z2 = NORMAL_95**2
    with np.errstate(invalid="ignore", divide="ignore"):
        share = found / planted
        middle = (share + z2 / (2 * planted)) / (1 + z2 / planted)
        half = NORMAL_95 * np.sqrt(share * (1 - share) / planted + z2 / (4 * planted**2)) / (1 + z2 / planted)
    return np.maximum(middle - half, 0.0), np.minimum(middle + half, 1.0)


def poisson_interval(count: int) -> tuple[float, float]:
    """Return the exact 95 % interval of a Poisson mean (Garwood, Biometrika 28, 437 (1936))."""
    from scipy.stats import chi2

    low = 0.5 * float(chi2.ppf(0.025, 2 * count)) if count else 0.0
    return low, 0.5 * float(chi2.ppf(0.975, 2 * count + 2))
