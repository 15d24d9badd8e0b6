"""Molecular yield: the share of traces with a molecule, false discoveries, upper limits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.histograms.memory import autocovariance, long_run, without_line
from meseta.segmentation.results import PlateauTable

__all__ = ["Yield", "hits_in_window", "molecular_yield", "share_interval"]

Floats = npt.NDArray[np.float64]
Truths = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Yield:
    """Share of traces with a molecule.

    Attributes
    ----------
    share, share_low, share_high : float
        (p - q) / (1 - q): p the share of traces with a plateau in the window, q the same in the blank; 95 %.
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


def share_interval(hits: float, traces: float, level: float = 0.95) -> tuple[float, float]:
    """Return Wilson's score interval of a share; ``traces`` may be an effective number.

    Notes
    -----
    Wilson, J. Am. Stat. Assoc. 22, 209 (1927).  0 and 1 are in it where no or all traces are hits.
    """
    from scipy import special

    if traces <= 0:
        return 0.0, 1.0
    z = float(special.ndtri((1 + level) / 2))
    p = hits / traces
    middle = (p + z**2 / (2 * traces)) / (1 + z**2 / traces)
    reach = z / (1 + z**2 / traces) * np.sqrt(p * (1 - p) / traces + z**2 / (4 * traces**2))
    return max(0.0, float(middle - reach)) if hits > 0 else 0.0, min(1.0, float(middle + reach)) if p < 1 else 1.0


def molecular_yield(hit: Truths, blank_hit: Truths | None = None) -> Yield:
    """Return the share of traces with a molecule, from plateaus in a window in the recording and in its blank.

    Parameters
    ----------
    hit, blank_hit : (traces,) bool
        Kept traces in the order of the record: whether each has a plateau in the window.  Without a blank q is 0 and
        unknown: nothing is subtracted, and the text says so.

    Notes
    -----
    A trace shows a plateau with probability p = y + (1 - y) q, so 1 - y is the ratio of two shares without plateau.
    Its interval combines Wilson intervals of both by the method of variance recovery for ratios, Donner and Zou, Stat.
    Methods Med. Res. 21, 347 (2012).  Both use the number of independent traces that the record is worth, from its
    memory.  The finder's own misses are not in it (see ``meseta expect``).
    """
    blank = np.zeros(0, bool) if blank_hit is None else blank_hit
    worth, blank_worth = _effective(hit), _effective(blank)
    p = float(hit.mean()) if len(hit) else np.nan
    q = float(blank.mean()) if len(blank) else 0.0
    low, high = _yield_interval(p, worth, q, blank_worth, 0.95)
    upper = _yield_interval(p, worth, q, blank_worth, 0.90)[1]
    share = (p - q) / (1 - q) if q < 1 else np.nan
    q_high = share_interval(q * blank_worth, blank_worth)[1] if len(blank) else np.nan
    false, false_high = (_false(share, q, p), _false(max(low, 0.0), q_high, p)) if len(blank) else (np.nan, np.nan)
    found = low > 0
    return Yield(
        share, low, high, upper, found, false, false_high, int(hit.sum()), len(hit), int(blank.sum()), len(blank),
        worth, blank_worth, _yield_text(share, low, high, upper, found, len(blank) > 0),
    )  # fmt: skip


def _yield_interval(p: float, worth: float, q: float, blank_worth: float, level: float) -> tuple[float, float]:
    """Return the interval of 1 - (1 - p)/(1 - q)."""
    top, bottom = 1 - p, 1 - q
    top_high, top_low = (1 - end for end in share_interval(p * worth, worth, level))
    if blank_worth <= 0:
        return 1 - top_high, 1 - top_low
    bottom_high, bottom_low = (1 - end for end in share_interval(q * blank_worth, blank_worth, level))
    if bottom <= 0:
        return np.nan, np.nan
    product = top * bottom
    low_root = product**2 - top_low * bottom_high * (2 * top - top_low) * (2 * bottom - bottom_high)
    high_root = product**2 - top_high * bottom_low * (2 * top - top_high) * (2 * bottom - bottom_low)
    ratio_low = (product - np.sqrt(max(low_root, 0.0))) / (bottom_high * (2 * bottom - bottom_high))
    ratio_high = (product + np.sqrt(max(high_root, 0.0))) / (bottom_low * (2 * bottom - bottom_low))
    return float(1 - ratio_high), float(1 - ratio_low)


def _false(share: float, q: float, p: float) -> float:
    """Return the share of hits that are not molecules, q (1 - y) / p."""
    return float(min(1.0, q * (1 - max(share, 0.0)) / p)) if p > 0 else np.nan


def _effective(hit: Truths) -> float:
    """Return how many independent traces a series of hits is worth."""
    traces = len(hit)
    if traces < 20 or hit.all() or not hit.any():
        return float(traces)
    covariance = autocovariance(without_line(hit.astype(np.float64)[:, None]))[:, 0]
    total, _, stands_out = long_run(covariance, traces)
    return float(traces / max(1.0, total / covariance[0])) if stands_out else float(traces)


def _yield_text(share: float, low: float, high: float, upper: float, found: bool, blank: bool) -> str:
    if not found:
        return f"no molecules found; at most {100 * max(upper, 0):.2g} % of traces (95 %)"
    text = f"molecules in {100 * share:.3g} % of traces ({100 * low:.3g} to {100 * high:.3g} %)"
    return text if blank else f"{text}; no blank: false plateaus are not taken off"


def hits_in_window(plateaus: PlateauTable, traces: int, window_g0: tuple[float, float]) -> Truths:
    """Return (traces,) bool: which traces have at least one plateau whose conductance lies in the window."""
    result = np.zeros(traces, bool)
    result[plateaus.trace[(plateaus.level_g0 >= window_g0[0]) & (plateaus.level_g0 < window_g0[1])]] = True
    return result
