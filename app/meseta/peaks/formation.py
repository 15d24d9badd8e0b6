"""How often a junction forms: the share of traces with an accepted plateau, put right for blanks and for misses."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meseta.errors import CallError

__all__ = ["Formation", "formation_probability"]


@dataclass(frozen=True)
class Formation:
    """Junction formation.

    Attributes
    ----------
    share, share_low, share_high : float
        Traces with an accepted plateau over all traces, with its 95 % interval.
    probability, probability_low, probability_high : float
        Share of traces that formed a junction: put right for what a blank shows and for plateaus that are missed.
    blank_share : float
        Share of the blank's traces with an accepted plateau; NaN where no blank was given.
    efficiency : float
        Share of true plateaus that are found.
    corrected : str
        In words, what was put right.
    """

    share: float
    share_low: float
    share_high: float
    probability: float
    probability_low: float
    probability_high: float
    blank_share: float
    efficiency: float
    corrected: str


def formation_probability(
    with_plateau: int,
    traces: int,
    blank_with_plateau: int = 0,
    blank_traces: int = 0,
    efficiency: float = 1.0,
    efficiency_sigma: float = 0.0,
    independent_share: float = 1.0,
) -> Formation:
    """Return the share of traces that formed a junction.

    Parameters
    ----------
    with_plateau, traces : int
        Traces with an accepted plateau, and all traces.
    blank_with_plateau, blank_traces : int
        The same of a blank recording; 0 traces where there is none.
    efficiency, efficiency_sigma : float
        Share of true plateaus that are found (from injected ones), with its standard error.
    independent_share : float
        Effective over actual number of traces, where the record has memory.

    Notes
    -----
    A trace shows a plateau if it has one that is found, or a false one: s = e p + (1 - e p) b, so
    p = (s - b)/(e (1 - b)).  Intervals: Jeffreys for the shares (Brown, Cai, DasGupta, Statist. Sci. 16, 101 (2001)),
    the shares and the efficiency propagated in quadrature.  The area of a peak is not a formation probability: it also
    grows with the length of plateaus.
    """
    _check(with_plateau, traces, blank_with_plateau, blank_traces, efficiency)
    share, low, high = _share(with_plateau, traces, independent_share)
    if blank_traces:
        blank, blank_low, blank_high = _share(blank_with_plateau, blank_traces, 1.0)
    else:
        blank = blank_low = blank_high = 0.0
    whole = efficiency * (1.0 - blank)
    probability = (share - blank) / whole
    by_blank = (1.0 - share) / (efficiency * (1.0 - blank) ** 2)
    by_efficiency = 1.96 * probability * efficiency_sigma / efficiency
    down = np.sqrt(((share - low) / whole) ** 2 + (by_blank * (blank_high - blank)) ** 2 + by_efficiency**2)
    up = np.sqrt(((high - share) / whole) ** 2 + (by_blank * (blank - blank_low)) ** 2 + by_efficiency**2)
    corrected = [f"blank rate {blank:.3g}"] if blank_traces else ["no blank given"]
    corrected.append(f"detection efficiency {efficiency:.3g}" if efficiency < 1.0 else "detection taken as perfect")
    return Formation(
        share,
        low,
        high,
        float(np.clip(probability, 0.0, 1.0)),
        float(np.clip(probability - down, 0.0, 1.0)),
        float(np.clip(probability + up, 0.0, 1.0)),
        blank if blank_traces else float("nan"),
        efficiency,
        "; ".join(corrected),
    )


def _share(found: int, traces: int, independent_share: float) -> tuple[float, float, float]:
    """Return a share and its Jeffreys interval, for as many traces as are independent."""
    from scipy import stats

    share, effective = found / traces, max(traces * independent_share, 1.0)
    beta = stats.beta(share * effective + 0.5, (1.0 - share) * effective + 0.5)
    low = 0.0 if found == 0 else float(beta.ppf(0.025))
    high = 1.0 if found == traces else float(beta.ppf(0.975))
    return share, low, high


def _check(found: int, traces: int, blank_found: int, blank_traces: int, efficiency: float) -> None:
    where = "junction formation"
    if traces < 1 or not 0 <= found <= traces:
        raise CallError(f"{found} of {traces} traces is not a share", where, "count traces, not plateaus")
    if blank_traces < 0 or not 0 <= blank_found <= blank_traces:
        raise CallError(f"{blank_found} of {blank_traces} blank traces is not a share", where, "count traces")
    if blank_traces and blank_found == blank_traces:
        raise CallError("every blank trace shows a plateau", where, "nothing can be told from such traces")
    if not 0 < efficiency <= 1:
        raise CallError(
            f"a detection efficiency of {efficiency} is not possible", where, "give a share above 0 up to 1"
        )
