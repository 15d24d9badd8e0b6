"""How many peaks to fit: as many as foretell traces that were left out of the fit.

Samples of one trace come in whole plateaus, so counts scatter far more than Poisson counts, and criteria that take them
as independent (AIC, BIC) always ask for more peaks.  Whole blocks of traces are left out instead.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.peaks.fitting import fit_model
from meseta.peaks.model import Model

__all__ = ["Gain", "block_counts", "held_out_gain"]

Floats = npt.NDArray[np.float64]

_FOLDS = 10


def block_counts(counts: npt.NDArray[np.unsignedinteger], rows: npt.NDArray[np.int64], folds: int = _FOLDS) -> Floats:
    """Return the summed counts of ``folds`` blocks of consecutive traces.

    Parameters
    ----------
    counts : (traces, bins) unsigned
    rows : (kept,) int64
        Traces that take part, in order.

    Returns
    -------
    (folds, bins) float64
    """
    parts = [part for part in np.array_split(rows, folds) if len(part)]
    sums = []
    for part in parts:
        whole = part[-1] - part[0] + 1 == len(part)
        chosen = counts[part[0] : part[-1] + 1] if whole else counts[part]
        sums.append(chosen.sum(axis=0, dtype=np.int64))
    return np.array(sums, float).reshape(len(parts), counts.shape[1])


@dataclass(frozen=True)
class Gain:
    """By how much a larger model foretells left-out blocks better than a smaller one.

    Attributes
    ----------
    mean, error : float
        Poisson deviance a block, and its standard error.
    shares : (blocks, peaks) float64
        Area of each peak of the larger model as a share of all counts, each block left out in turn.
    """

    mean: float
    error: float
    shares: Floats

    def area_in_errors(self, peak: int) -> float:
        """Return the area of a peak of the larger model over its jackknife standard error."""
        share, number = self.shares[:, peak], len(self.shares)
        error = float(np.sqrt((number - 1) * share.var()))
        return float(share.mean()) / error if error > 0 else np.inf


def held_out_gain(blocks: Floats, smaller: Model, larger: Model) -> Gain:
    """Return by how much the larger model foretells left-out blocks better.

    Each block is left out in turn; both models are fitted to the rest and judged on the block.
    """
    total = blocks.sum(axis=0)
    gains, shares = [], []
    start_small, start_large = fit_model(smaller, total).inner, fit_model(larger, total).inner
    for block in blocks:
        rest = total - block
        share = block.sum() / max(rest.sum(), 1.0)
        small = fit_model(smaller, rest, start=start_small)
        large = fit_model(larger, rest, start=start_large)
        shares.append(large.peaks[:, 0] / max(rest.sum(), 1.0))
        gains.append(
            _deviance(block, share * smaller.curves(small.inner).total)
            - _deviance(block, share * larger.curves(large.inner).total)
        )
    values = np.array(gains)
    error = float(values.std(ddof=1) / np.sqrt(len(values))) if len(values) > 1 else np.inf
    return Gain(float(values.mean()), error, np.array(shares))


def _deviance(counts: Floats, expected: Floats) -> float:
    mu = np.maximum(expected, 1e-9 * max(float(counts.mean()), 1e-300))
    with np.errstate(divide="ignore", invalid="ignore"):
        terms = np.where(counts > 0, counts * np.log(counts / mu), 0.0)
    return float(2.0 * (mu - counts + terms).sum())
