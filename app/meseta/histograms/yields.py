"""Molecular yield: the share of traces with a molecule, false discoveries, upper limits."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.histograms.memory import autocovariance, long_run, without_line
from meseta.histograms.resampling import FEWEST_SPECIMENS, t_factor
from meseta.segmentation.results import PlateauTable

__all__ = ["Yield", "hits_in_window", "molecular_yield", "share_interval", "window_efficiency"]

Floats = npt.NDArray[np.float64]
Truths = npt.NDArray[np.bool_]
_NORMAL = 1.959963984540054


@dataclass(frozen=True)
class Yield:
    """Share of traces with a molecule.

    Attributes
    ----------
    share, share_low, share_high : float
        (p - q) / (1 - q) / efficiency: p the share of traces with a plateau in the window, q the same in the blank;
        95 %.  The lower end may be negative.
    upper_limit : float
        One-sided 95 % upper limit; what to quote where nothing is found.
    found : bool
        Whether the interval excludes zero.
    false_discovery, false_discovery_high : float
        Share of the plateaus found that the blank would have shown as well, and its 95 % upper limit.
    hits, traces, blank_hits, blank_traces : int
    effective_traces, blank_effective_traces : float
        Independent traces that the recordings are worth for this question.
    text : str
        One sentence.
    reason : str
        Why the recording is worth fewer traces ("memory along the record"); empty where it is not.
    efficiency, efficiency_error : float
        Share of traces with a molecule whose plateau is found in the window, and its standard error.
    """

    share: float
    share_low: float
    share_high: float
    upper_limit: float
    found: bool
    false_discovery: float
    false_discovery_high: float
    hits: int
    traces: int
    blank_hits: int
    blank_traces: int
    effective_traces: float
    blank_effective_traces: float
    text: str
    reason: str = ""
    efficiency: float = 1.0
    efficiency_error: float = 0.0


def share_interval(hits: float, traces: float, level: float = 0.95, widen: float = 1.0) -> tuple[float, float]:
    """Return Wilson's score interval of a share; ``traces`` may be an effective number.

    ``widen`` multiplies the normal quantile (Student's t over it, where the effective number comes from few specimens).

    Notes
    -----
    Wilson, J. Am. Stat. Assoc. 22, 209 (1927).  0 and 1 are in it where no or all traces are hits.
    """
    from scipy import special

    if traces <= 0:
        return 0.0, 1.0
    z = widen * float(special.ndtri((1 + level) / 2))
    p = hits / traces
    middle = (p + z**2 / (2 * traces)) / (1 + z**2 / traces)
    reach = z / (1 + z**2 / traces) * np.sqrt(p * (1 - p) / traces + z**2 / (4 * traces**2))
    return max(0.0, float(middle - reach)) if hits > 0 else 0.0, min(1.0, float(middle + reach)) if p < 1 else 1.0


@dataclass(frozen=True)
class _Share:
    """A share of traces, with what it is worth."""

    share: float
    traces: int
    worth: float
    widen: float
    reason: str

    def interval(self, level: float) -> tuple[float, float]:
        return share_interval(self.share * self.worth, self.worth, level, self.widen)


def molecular_yield(
    hit: Truths,
    blank_hit: Truths | None = None,
    efficiency: float = 1.0,
    efficiency_error: float = 0.0,
    specimen: npt.NDArray[Any] | None = None,
    blank_specimen: npt.NDArray[Any] | None = None,
) -> Yield:
    """Return the share of traces with a molecule, from plateaus in a window in the recording and in its blank.

    Parameters
    ----------
    hit, blank_hit : (traces,) bool
        Kept traces in the order of the record: whether each has a plateau in the window.  Without a blank q is 0 and
        unknown: nothing is subtracted, and the text says so.
    efficiency, efficiency_error : float
        Share of traces with a molecule whose plateau is found in the window, and its standard error; from
        ``meseta expect`` through :func:`window_efficiency`, or from simulated traces.  1 corrects for nothing.
    specimen, blank_specimen : (traces,) array, optional
        Specimen of each trace; with five or more, differences between them are in the interval.

    Raises
    ------
    CallError
        Where the efficiency is no share.

    Notes
    -----
    A trace shows a plateau with probability p = e y + (1 - e y) q with e the efficiency, so 1 - e y is the ratio of two
    shares without plateau.  Its interval combines Wilson intervals of both by the method of variance recovery for
    ratios, Donner and Zou, Stat. Methods Med. Res. 21, 347 (2012).  Both use the number of independent traces that the
    record is worth: from its memory, or from the spread between specimens (then with Student's t for their number).
    The error of the efficiency is added in quadrature.
    """
    if not 0 < efficiency <= 1 or not 0 <= efficiency_error < efficiency:
        raise CallError(
            f"an efficiency of {efficiency:g} ± {efficiency_error:g} is no share of traces",
            "molecular yield",
            "give a number above 0 and at most 1, and an error below it",
        )
    mine = _share(hit, specimen)
    blank = _share(np.zeros(0, bool) if blank_hit is None else blank_hit, blank_specimen)
    p, q = mine.share, blank.share if blank.traces else 0.0
    detected = (p - q) / (1 - q) if q < 1 else np.nan
    low, high = _detected_interval(mine, blank, 0.95)
    share, share_low, share_high = _corrected(detected, low, high, efficiency, efficiency_error)
    one_sided = _detected_interval(mine, blank, 0.90)
    upper = _corrected(detected, *one_sided, efficiency, efficiency_error * 1.644853627 / _NORMAL)[2]
    found = bool(share_low > 0)
    q_high = blank.interval(0.95)[1] if blank.traces else np.nan
    false, false_high = (_false(detected, q, p), _false(max(low, 0.0), q_high, p)) if blank.traces else (np.nan, np.nan)
    return Yield(
        share=share,
        share_low=share_low,
        share_high=share_high,
        upper_limit=upper,
        found=found,
        false_discovery=false,
        false_discovery_high=false_high,
        hits=round(p * mine.traces) if mine.traces else 0,
        traces=mine.traces,
        blank_hits=round(q * blank.traces),
        blank_traces=blank.traces,
        effective_traces=mine.worth,
        blank_effective_traces=blank.worth,
        text=_yield_text(share, share_low, share_high, upper, found, blank.traces > 0, efficiency, mine.traces),
        reason=mine.reason,
        efficiency=efficiency,
        efficiency_error=efficiency_error,
    )


def _corrected(detected: float, low: float, high: float, efficiency: float, error: float) -> tuple[float, float, float]:
    """Return detected share and its interval, over an efficiency with an error; at most 1."""
    share = detected / efficiency
    from_efficiency = _NORMAL * error * abs(share) / efficiency
    below = np.hypot((detected - low) / efficiency, from_efficiency)
    above = np.hypot((high - detected) / efficiency, from_efficiency)
    return min(share, 1.0), float(min(share - below, 1.0)), float(min(share + above, 1.0))


def _detected_interval(mine: _Share, blank: _Share, level: float) -> tuple[float, float]:
    """Return the interval of 1 - (1 - p)/(1 - q)."""
    top_high, top_low = (1 - end for end in mine.interval(level))
    if blank.traces == 0:
        return 1 - top_high, 1 - top_low
    top, bottom = 1 - mine.share, 1 - blank.share
    bottom_high, bottom_low = (1 - end for end in blank.interval(level))
    if bottom <= 0:
        return np.nan, np.nan
    product = top * bottom
    low_root = product**2 - top_low * bottom_high * (2 * top - top_low) * (2 * bottom - bottom_high)
    high_root = product**2 - top_high * bottom_low * (2 * top - top_high) * (2 * bottom - bottom_low)
    ratio_low = (product - np.sqrt(max(low_root, 0.0))) / (bottom_high * (2 * bottom - bottom_high))
    ratio_high = (product + np.sqrt(max(high_root, 0.0))) / (bottom_low * (2 * bottom - bottom_low))
    return float(1 - ratio_high), float(1 - ratio_low)


def _false(detected: float, q: float, p: float) -> float:
    """Return the share of hits that are not molecules, q (1 - e y) / p."""
    return float(min(1.0, q * (1 - max(detected, 0.0)) / p)) if p > 0 else np.nan


def _share(hit: Truths, specimen: npt.NDArray[Any] | None) -> _Share:
    """Return a share of hits and how many independent traces it is worth."""
    traces = len(hit)
    share = float(hit.mean()) if traces else np.nan
    whole = _Share(share, traces, float(traces), 1.0, "")
    if traces < 20 or hit.all() or not hit.any():
        return whole
    names, label = np.unique(np.zeros(traces) if specimen is None else np.asarray(specimen), return_inverse=True)
    if len(names) >= FEWEST_SPECIMENS:
        return _between_specimens(whole, hit, label, len(names))
    covariance = autocovariance(without_line(hit.astype(np.float64)[:, None]))[:, 0]
    total, _, stands_out = long_run(covariance, traces)
    inflation = max(1.0, total / covariance[0]) if stands_out else 1.0
    return _Share(share, traces, traces / inflation, 1.0, "memory along the record" if inflation > 1 else "")


def _between_specimens(whole: _Share, hit: Truths, label: npt.NDArray[np.int64], groups: int) -> _Share:
    """Return what a share is worth that differs between specimens (variance of a ratio of sums over specimens)."""
    size = np.bincount(label, minlength=groups)
    apart = np.bincount(label, hit - whole.share, groups)
    variance = groups / (groups - 1) * float((apart**2).sum()) / whole.traces**2
    binomial = whole.share * (1 - whole.share) / whole.traces
    inflation = max(1.0, variance / binomial)
    reason = f"differences between {groups} specimens" if inflation > 1 else ""
    return _Share(whole.share, whole.traces, whole.traces / inflation, t_factor(len(size) - 1), reason)


def _yield_text(
    share: float, low: float, high: float, upper: float, found: bool, blank: bool, efficiency: float, traces: int
) -> str:
    if traces == 0:
        return "no trace is kept"
    corrected = f", corrected for an efficiency of {100 * efficiency:.3g} %" if efficiency < 1 else ""
    if not found:
        return f"no molecules found; at most {100 * max(upper, 0):.2g} % of traces (95 %){corrected}"
    text = f"molecules in {100 * share:.3g} % of traces ({100 * low:.3g} to {100 * high:.3g} %){corrected}"
    return text if blank else f"{text}; no blank: false plateaus are not taken off"


def hits_in_window(plateaus: PlateauTable, traces: int, window_g0: tuple[float, float]) -> Truths:
    """Return (traces,) bool: which traces have at least one plateau whose conductance lies in the window."""
    result = np.zeros(traces, bool)
    result[plateaus.trace[(plateaus.level_g0 >= window_g0[0]) & (plateaus.level_g0 < window_g0[1])]] = True
    return result


class Detection(Protocol):
    """What :func:`window_efficiency` asks of the result of ``meseta.segmentation.expect``."""

    @property
    def conductance_g0(self) -> Floats: ...
    @property
    def length(self) -> Floats: ...
    @property
    def planted(self) -> npt.NDArray[np.int64]: ...
    @property
    def found(self) -> npt.NDArray[np.int64]: ...


def window_efficiency(
    detection: Detection, plateaus: PlateauTable, window_g0: tuple[float, float]
) -> tuple[float, float]:
    """Return the efficiency with which molecules like those found in a window are found, and its standard error.

    Parameters
    ----------
    detection : meseta.segmentation.Expectation
        Efficiency over conductance and length.
    plateaus : PlateauTable
        Of the recording; those in the window that the record's end or floor did not cut short count.
    window_g0 : (low, high)

    Returns
    -------
    efficiency, error : float
        Number found over the number that must have been there, each plateau found standing for 1 / efficiency of its
        kind (Horvitz and Thompson, J. Am. Stat. Assoc. 47, 663 (1952)); NaN where no plateau lies on the grid.

    Notes
    -----
    Efficiencies are those of the nearest cell in log conductance and log length.  Kinds of which none was found are
    not in it: a molecule too short to be seen at all has no efficiency but zero.
    """
    mine = (plateaus.level_g0 >= window_g0[0]) & (plateaus.level_g0 < window_g0[1]) & (plateaus.length_drive > 0)
    at = [
        np.abs(np.log(grid)[:, None] - np.log(values[mine])).argmin(0)
        for grid, values in ((detection.conductance_g0, plateaus.level_g0), (detection.length, plateaus.length_drive))
    ]
    planted, found = detection.planted[at[0], at[1]], detection.found[at[0], at[1]]
    usable = found > 0
    if not usable.any():
        return np.nan, np.nan
    cells, number = np.unique(np.stack([at[0][usable], at[1][usable]]), axis=1, return_counts=True)
    planted, found = (values[cells[0], cells[1]].astype(np.float64) for values in (detection.planted, detection.found))
    efficiency = found / planted
    # a half is added so that a cell in which all were found still has an error
    spread = np.sqrt((found + 0.5) * (planted - found + 0.5)) / (planted + 1) ** 1.5
    must = number / efficiency
    result = number.sum() / must.sum()
    error = result * np.sqrt(((must / efficiency * spread) ** 2).sum()) / must.sum()
    return float(min(result, 1.0)), float(error)
