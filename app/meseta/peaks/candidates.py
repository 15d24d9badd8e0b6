"""Where a histogram has peaks: places where the logarithm of its smoothed density is curved like the top of a hill.

A background that falls as a straight line or an exponential has no such curvature however steep it is, so a shoulder on
a tunnelling background shows as well as a free-standing peak.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.ndimage import gaussian_filter1d

__all__ = ["Candidate", "find_candidates"]

Floats = npt.NDArray[np.float64]

_FINEST = {"logarithmic": 0.025, "linear": 0.05}
_SUB_QUANTUM, _SUB_QUANTUM_SCALE = -0.4, 0.045
_LEAST_CURVATURE = 0.06
_LEAST_SIGNIFICANCE = 5.0
_LEAST_OVER_CHANCE = 2.5
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
    over_chance : float
        Curvature over what so few traces, scattered evenly, show at this scale by chance (one standard deviation).
    share : float
        Samples within one width, as a share of the most that any candidate has.
    own : float
        What part of the density there is the peak's own: the curvature over that of a lone peak of its width.
    broader : tuple of (float, float)
        Position and width of the wider hills that it is part of, from narrow to wide: what looks like a narrow peak may
        be a lump on a wide one, or one of two that overlap.
    """

    position_u: float
    width_u: float
    curvature: float
    significance: float
    over_chance: float
    share: float
    own: float
    broader: tuple[tuple[float, float], ...] = ()


def find_candidates(
    middle: npt.ArrayLike,
    counts: npt.ArrayLike,
    traces_in_bin: npt.ArrayLike,
    replicates: npt.ArrayLike | None,
    usable: tuple[float, float],
    logarithmic: bool,
    traces: int,
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
    traces : int
        Traces that were counted.

    Notes
    -----
    A few traces make hills of their own on fine scales, and those do not change from draw to draw: so a hill must also
    be higher than n traces scattered evenly would make one, whose curvature has a standard deviation of
    sqrt(3/(4 n)) (second derivative of a Gaussian kernel); n is what reaches the kernel, unequal parts counting less.

    Scale-space search from fine to coarse (Witkin, Proc. IJCAI 1019 (1983), for the idea; the statistic is our own).
    """
    u, data = np.asarray(middle, float), np.asarray(counts, float)
    if len(u) < 8 or not data.any():
        return []
    step = float(u[1] - u[0])
    scales = _scales(u, step, logarithmic)
    reach = np.asarray(traces_in_bin, float)
    layers = [_curvature(data, reach, replicates, scale / step, traces) for scale in scales]
    found: list[Candidate] = []
    for level, scale in enumerate(scales):
        curvature, error, chance = layers[level]
        least = np.maximum(_LEAST_SIGNIFICANCE * error, _LEAST_OVER_CHANCE * chance)
        for at in _hilltops(curvature, least, gaussian_filter1d(data, scale / step, mode="nearest")):
            inside = usable[0] + 0.5 * scale <= u[at] <= usable[1] - 0.5 * scale
            if _cut(data, at, scale / step):
                continue
            if logarithmic and u[at] < _SUB_QUANTUM and scale < _SUB_QUANTUM_SCALE:
                continue  # below one quantum nothing is that narrow but steps of the converter and jumps
            width = _width(np.array([layer[0][at] for layer in layers]), scales, level)
            if not inside:
                continue
            part = next((n for n, other in enumerate(found) if _within(u[at], scale, other)), None)
            if part is None:
                over = float(curvature[at] / error[at]), float(curvature[at] / chance[at])
                own = min(float(curvature[at]) * (1.0 + (width / scale) ** 2), 1.0)
                found.append(Candidate(float(u[at]), width, float(curvature[at]), *over, 0.0, own))
            else:
                found[part] = _with_broader(found[part], float(u[at]), width)
    return _with_share(sorted(found, key=lambda candidate: candidate.position_u), u, data)


def _within(place: float, scale: float, other: Candidate) -> bool:
    """Return whether a hill of this scale is another view of one that was found on a finer scale."""
    return bool(abs(place - other.position_u) <= max(scale, other.width_u))


def _with_broader(found: Candidate, place: float, width: float) -> Candidate:
    """Return the candidate with one more wider hill, if that is clearly wider than the last."""
    last = found.broader[-1][1] if found.broader else found.width_u
    return replace(found, broader=(*found.broader, (place, width))) if width > 1.4 * last else found


def _cut(data: Floats, at: int, scale_bins: float) -> bool:
    """Return whether the data end so near that the end itself looks like a slope of a hill.

    At the lower end they must be high there; at the upper end of what was counted traces begin, more or less sharply.
    """
    reach, few = int(np.ceil(2.0 * scale_bins)), max(int(scale_bins / 2), 1)
    here = data[max(at - few, 0) : at + few + 1].mean()
    last = int(np.flatnonzero(data)[-1])
    return bool(last - at < reach or (at < reach and data[:few].mean() > 0.2 * here))


def _hilltops(curvature: Floats, least: Floats, smooth: Floats) -> npt.NDArray[np.int64]:
    """Return the top of every stretch of positive curvature that is large and no chance.

    The curvature of a free-standing peak is the same all over, so that noise says where it is largest, and it is
    noisiest on the foot: the top is where curvature times the square root of the density, its significance if counts
    were independent, is largest.

    Two tops that no stretch of non-positive curvature parts are one peak with noise on it.
    """
    hill = curvature > 0
    edges = np.flatnonzero(np.diff(np.concatenate([[False], hill, [False]]).astype(np.int8)))
    weighed = curvature * np.sqrt(smooth)
    tops = [first + int(np.argmax(weighed[first:last])) for first, last in edges.reshape(-1, 2)]
    good = [
        at for at in tops if 0 < at < len(curvature) - 1 and curvature[at] >= max(_LEAST_CURVATURE, float(least[at]))
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
    data: Floats, traces_in_bin: Floats, replicates: npt.ArrayLike | None, scale_bins: float, traces: int
) -> tuple[Floats, Floats, Floats]:
    """Return curvature, its standard error, and its standard deviation where traces are scattered evenly."""
    reach = gaussian_filter1d(traces_in_bin, scale_bins, mode="nearest")
    # Where next to nothing was counted the foot of a neighbour is a hill too: flatten it.
    hill = np.where(reach < max(2.0, 0.01 * float(reach.max())), 0.0, _hill(data, scale_bins))
    if replicates is not None and len(np.asarray(replicates)) >= 20:
        drawn = np.asarray(replicates, float)[:60]
        error = np.std(_hill(drawn, scale_bins), axis=0) + 1e-12
        return hill, error, np.sqrt(0.75 / _contributions(data, drawn, scale_bins, traces))
    smooth = gaussian_filter1d(data, scale_bins, mode="nearest")
    # Every trace in every bin is one contribution: those within the kernel are 2 sqrt(pi) s times those in a bin.
    independent = np.maximum(reach, 0.5) * 2.0 * scale_bins * np.sqrt(np.pi)
    error = np.where(smooth > 0, np.sqrt(1.5 / independent), np.inf)
    return hill, error, error


def _contributions(data: Floats, drawn: Floats, scale_bins: float, traces: int) -> Floats:
    """Return how many equal, independent traces would make the smoothed counts scatter as they do.

    (sum of parts)² over the sum of their squares; draws of a fixed number of traces give the latter less the square of
    the sum over that number.
    """
    total = gaussian_filter1d(data, scale_bins, mode="nearest")
    scatter = np.var(gaussian_filter1d(drawn, scale_bins, mode="nearest"), axis=0)
    squares = scatter + total**2 / max(traces, 1)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(squares > 0, total**2 / squares, 0.0) + 1e-12


def _with_share(found: list[Candidate], u: Floats, data: Floats) -> list[Candidate]:
    inside = [float(data[np.abs(u - c.position_u) <= c.width_u].sum()) for c in found]
    most = max([*inside, 1.0])
    return [replace(c, share=part / most) for c, part in zip(found, inside, strict=True)]
