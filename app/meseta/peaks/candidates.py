"""Where a histogram has peaks: places where the logarithm of its smoothed density is curved like the top of a hill.

A background that falls as a straight line or an exponential has no such curvature however steep it is, so a shoulder on
a tunnelling background shows as well as a free-standing peak.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.ndimage import gaussian_filter1d

__all__ = ["Candidate", "find_candidates"]

Floats = npt.NDArray[np.float64]

_FINEST = {"logarithmic": 0.025, "linear": 0.05}
_SUB_QUANTUM, _SUB_QUANTUM_SCALE = -0.4, 0.045
_LEAST_CURVATURE = 0.06
_LEAST_SIGNIFICANCE = 5.0
_SCALE_STEP = 2**0.5


@dataclass(frozen=True)
class Candidate:
    """A place that looks like a peak.

    Attributes
    ----------
    position_u, width_u : float
        On the axis: decades, or the unit of a linear axis.
    curvature : float
        -s² d²(ln density)/du² at the scale s where it was found: 0 on any exponential, towards 1 for a lone peak.
    significance : float
        Curvature over its standard error.
    share : float
        Samples within one width, as a share of the most that any candidate has.
    """

    position_u: float
    width_u: float
    curvature: float
    significance: float
    share: float


def find_candidates(
    middle: npt.ArrayLike,
    counts: npt.ArrayLike,
    traces_in_bin: npt.ArrayLike,
    replicates: npt.ArrayLike | None,
    usable: tuple[float, float],
    logarithmic: bool,
) -> list[Candidate]:
    """Return the places that look like peaks, sorted by position.

    Parameters
    ----------
    middle : (bins,) array_like
        Equally spaced bin centres on the axis.
    counts, traces_in_bin : (bins,) array_like
        Samples, and traces that reach each bin.
    replicates : (n, bins) array_like, optional
        Counts of resampled data sets: they tell how far the curvature is chance.  Without them a trace is taken as one
        independent contribution.
    usable : (float, float)
        Range of the axis in which a peak may lie (above the floor).
    logarithmic : bool

    Notes
    -----
    Scale-space search from fine to coarse (Witkin, Proc. IJCAI 1019 (1983), for the idea; the statistic is our own).
    """
    u, data = np.asarray(middle, float), np.asarray(counts, float)
    if len(u) < 8 or not data.any():
        return []
    step = float(u[1] - u[0])
    scales = _scales(u, step, logarithmic)
    layers = [_curvature(data, np.asarray(traces_in_bin, float), replicates, scale / step) for scale in scales]
    found: list[Candidate] = []
    for level, scale in enumerate(scales):
        curvature, error = layers[level]
        for at in _hilltops(curvature, error, gaussian_filter1d(data, scale / step, mode="nearest")):
            inside = usable[0] + 0.5 * scale <= u[at] <= usable[1] - 0.5 * scale
            if _cut(data, at, scale / step):
                continue
            if logarithmic and u[at] < _SUB_QUANTUM and scale < _SUB_QUANTUM_SCALE:
                continue  # below one quantum nothing is that narrow but steps of the converter and jumps
            width = _width(np.array([layer[0][at] for layer in layers]), scales, level)
            if inside and all(abs(u[at] - other.position_u) > max(scale, other.width_u) for other in found):
                z = curvature[at] / max(error[at], 1e-300)
                found.append(Candidate(float(u[at]), width, float(curvature[at]), float(z), 0.0))
    return _with_share(sorted(found, key=lambda candidate: candidate.position_u), u, data)


def _cut(data: Floats, at: int, scale_bins: float) -> bool:
    """Return whether the data end so near, and so high, that the end itself looks like a slope of a hill."""
    reach = int(np.ceil(2.0 * scale_bins))
    few = max(int(scale_bins / 2), 1)
    here = data[max(at - few, 0) : at + few + 1].mean()
    return (at < reach and data[:few].mean() > 0.2 * here) or (
        len(data) - 1 - at < reach and data[-few:].mean() > 0.2 * here
    )


def _hilltops(curvature: Floats, error: Floats, smooth: Floats) -> npt.NDArray[np.int64]:
    """Return the top of every stretch of positive curvature that is large and no chance.

    The top is the largest curvature; where that lies on the foot of a free-standing peak (its curvature is the same
    all over), the highest density inside the stretch.

    Two tops that no stretch of non-positive curvature parts are one peak with noise on it.
    """
    hill = curvature > 0
    edges = np.flatnonzero(np.diff(np.concatenate([[False], hill, [False]]).astype(np.int8)))
    tops = []
    for first, last in edges.reshape(-1, 2):
        bend, high = first + int(np.argmax(curvature[first:last])), first + int(np.argmax(smooth[first:last]))
        free = first < high < last - 1 and curvature[high] >= 0.5 * curvature[bend]
        tops.append(high if free and smooth[bend] < 0.3 * smooth[high] else bend)
    good = [
        at
        for at in tops
        if 0 < at < len(curvature) - 1
        and curvature[at] >= _LEAST_CURVATURE
        and curvature[at] >= _LEAST_SIGNIFICANCE * error[at]
    ]
    return np.array(good, np.int64)


def _width(profile: Floats, scales: Floats, level: int) -> float:
    """Return the width of a peak from how its curvature grows with the scale.

    A lone Gaussian has s²/(w² + s²), so that curvature / sqrt(s) is highest at s = sqrt(3) w.
    """
    response = profile[level:] / np.sqrt(scales[level:])
    falls = np.flatnonzero(np.diff(response) < 0)
    best = level + (int(falls[0]) if len(falls) else len(response) - 1)
    return float(max(scales[best] / np.sqrt(3.0), scales[level] / 2.0))


def _scales(u: Floats, step: float, logarithmic: bool) -> Floats:
    span = float(u[-1] - u[0])
    finest = _FINEST["logarithmic"] if logarithmic else _FINEST["linear"] * span / 5.0
    finest = max(2.0 * step, finest)
    coarsest = min(span / 6.0, 0.5) if logarithmic else span / 8.0
    number = max(int(np.log(max(coarsest / finest, 1.0)) / np.log(_SCALE_STEP)) + 1, 1)
    return np.asarray(finest * _SCALE_STEP ** np.arange(number), np.float64)


def _hill(data: Floats, scale_bins: float) -> Floats:
    """Return -s² (ln smoothed)'' along the last axis."""
    smooth = gaussian_filter1d(data, scale_bins, mode="nearest", truncate=5.0)
    first = gaussian_filter1d(data, scale_bins, order=1, mode="nearest", truncate=5.0)
    second = gaussian_filter1d(data, scale_bins, order=2, mode="nearest", truncate=5.0)
    # Where nothing was counted there is no logarithm: a small share of one sample keeps it finite.
    base = np.maximum(smooth, 1e-3 * max(float(smooth.mean()), 1e-300))
    hill: Floats = -(scale_bins**2) * (second / base - (first / base) ** 2)
    return hill


def _curvature(
    data: Floats, traces_in_bin: Floats, replicates: npt.ArrayLike | None, scale_bins: float
) -> tuple[Floats, Floats]:
    """Return curvature and its standard error."""
    reach = gaussian_filter1d(traces_in_bin, scale_bins, mode="nearest")
    # Where next to nothing was counted the foot of a neighbour is a hill too: flatten it.
    hill = np.where(reach < max(2.0, 0.01 * float(reach.max())), 0.0, _hill(data, scale_bins))
    if replicates is not None and len(np.asarray(replicates)) >= 20:
        spread = _hill(np.asarray(replicates, float)[:60], scale_bins)
        return hill, np.std(spread, axis=0) + 1e-12
    smooth = gaussian_filter1d(data, scale_bins, mode="nearest")
    # var(s² d'' / d): second derivative of a Gaussian kernel, contributions of 2 (counts a trace) each.
    independent = np.maximum(reach, 0.5) * 2.0 * scale_bins * np.sqrt(np.pi) / 0.75
    return hill, np.where(smooth > 0, np.sqrt(2.0 / independent), np.inf)


def _with_share(found: list[Candidate], u: Floats, data: Floats) -> list[Candidate]:
    inside = [float(data[np.abs(u - c.position_u) <= c.width_u].sum()) for c in found]
    most = max([*inside, 1.0])
    return [
        Candidate(c.position_u, c.width_u, c.curvature, c.significance, part / most)
        for c, part in zip(found, inside, strict=True)
    ]
