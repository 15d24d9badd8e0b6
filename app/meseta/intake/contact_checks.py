"""Checks against physics: single atoms, tunnelling, opening against closing, the zero of displacement."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.intake.findings import Finding, Look, floor_of
from meseta.intake.response import half_decades, passages
from meseta.traces import Quality

__all__ = ["both_ways", "direction", "peak_positions", "single_atom", "tunnelling_slope", "zero_level"]

Floats = npt.NDArray[np.float64]
LEAST_SAMPLES: Final = 200
PEAK_SEARCH: Final = (-2.6, 2.6)
FACTORS: Final = {0.01: "100", 0.1: "10", 0.5: "2", 2.0: "2", 10.0: "10", 100.0: "100"}
SINGLE_ATOM_G0: Final = (0.7, 2.6)
"""Where single-atom peaks of metals lie, with room: 1 to 2.5 G0 for Pt (Nielsen et al., PRB 67, 245411)."""
TUNNELLING: Final = (2.0, 25.0)
"""Decades per nm from solvent to vacuum (2 kappa / ln 10 is 10 for about 5 eV), with room on both sides."""
TUNNELLING_G0: Final = (3e-5, 3e-3)
SLOW_SAMPLES: Final = 2.5
LEAST_SLOPES: Final = 10
ODD_G0: Final = (0.2, 4.0)
"""Between these a peak that belongs to no single atom is odd; further away it is a molecule, or a thick contact."""
BEGIN_SAMPLES: Final = 20
APART_BINS: Final = 7
NEAR_LEVEL: Final = 0.02


def peak_positions(pooled: Floats, below_g0: float = np.inf) -> list[tuple[float, float]]:
    """Return (G0, how many standard deviations it stands out) of where contacts pile up, the strongest first.

    Looked for as rises above a smooth histogram in log G, in which each decade step counts alike; what lies at or above
    ``below_g0`` is the closed contact that traces begin with.
    """
    positive = pooled[(pooled > 0) & (pooled < below_g0)]
    edges = np.arange(PEAK_SEARCH[0], PEAK_SEARCH[1] + 0.02, 0.02)
    counts = np.histogram(np.log10(positive), edges)[0].astype(np.float64)
    if counts.sum() < LEAST_SAMPLES:
        return []
    narrow = np.convolve(counts, np.ones(3) / 3, "same")
    wide = np.convolve(counts, np.ones(31) / 31, "same")
    excess = (narrow - wide) / np.sqrt(wide + 1.0)
    found: list[tuple[float, float]] = []
    while True:
        place = int(np.argmax(excess))
        if excess[place] < 5.0:
            return found
        if narrow[place] >= 1.6 * wide[place]:
            found.append((float(10 ** ((edges[place] + edges[place + 1]) / 2)), float(excess[place])))
        excess[max(place - APART_BINS, 0) : place + APART_BINS + 1] = 0.0


def single_atom(look: Look) -> Finding | None:
    """Compare the strongest metallic peak with 1 G0, where single atoms of monovalent metals stand.

    Nearly 1 G0 for Na, Cu, Au, Ag (Krans et al., PRB 48, 14721; Gai et al., PRB 53, 1042); other metals differ, so only
    factors of 2, 10 and 100 are named, as questions.
    """
    begins = [one[np.isfinite(one)][:BEGIN_SAMPLES] for one in look.values if np.isfinite(one).any()]
    closed = float(np.median([np.median(one) for one in begins])) if begins else np.inf
    peaks = peak_positions(look.pooled, 0.8 * closed if closed > 0 else np.inf)
    if not peaks:
        return None
    position, strength = peaks[0]
    for factor, word in FACTORS.items():
        if abs(np.log10(position / factor)) < (0.03 if factor in (0.5, 2.0) else 0.06):
            near_one = [at for at, height in peaks if abs(np.log10(at)) < 0.08 and height > 0.3 * strength]
            if near_one and word != "2":  # a molecule or a cluster beside single atoms where they should be
                return Finding("single-atom peak", True, f"contacts pile up at {near_one[0]:.3g} G0")
            side = "high" if factor > 1 else "low"
            text = (
                f"contacts pile up at {position:.3g} G0, a factor {word} too {side} for single atoms: "
                f"is gain, bias or a divider off by {word}?"
            )
            return Finding("single-atom peak", False, text)
    text = f"contacts pile up at {position:.3g} G0"
    if abs(np.log10(position)) < 0.08:
        return Finding("single-atom peak", True, text)
    if SINGLE_ATOM_G0[0] <= position <= SINGLE_ATOM_G0[1]:
        return Finding("single-atom peak", True, f"{text}; for a monovalent metal 1 is expected")
    if ODD_G0[0] <= position <= ODD_G0[1]:
        return Finding("single-atom peak", False, f"{text}; for a monovalent metal 1 is expected, for no metal this")
    return None


def tunnelling_slope(look: Look) -> Finding | None:
    """Compare the fall of the conductance after the last contact with tunnelling.

    The median over all half decades between 3e-3 and 3e-5 G0, well above the floor, that are not passed in a jump.
    """
    part = look.part
    if part.axis.unit != "nm":
        return None
    centre, sigma = floor_of(look.pooled)
    lowest = max(TUNNELLING_G0[0], 10 * sigma + abs(centre)) if np.isfinite(sigma) else TUNNELLING_G0[0]
    bounds = half_decades(TUNNELLING_G0[1], lowest)
    slopes = []
    for (start, stop), values in zip(look.spans, look.values, strict=True):
        places = passages(values, bounds)
        slow = np.flatnonzero(np.diff(places) >= SLOW_SAMPLES)
        if len(slow):
            drive = np.abs(_drive(part, start, stop))
            at = np.interp(places, np.arange(len(drive)), drive)
            slopes += (0.5 / np.maximum(np.diff(at)[slow], 1e-12)).tolist()
    if len(slopes) < LEAST_SLOPES:
        return None
    slope = float(np.median(slopes))
    text = f"the conductance falls by {slope:.3g} decades per nm between {TUNNELLING_G0[1]:g} and {bounds[-1]:.2g} G0"
    if slope > TUNNELLING[1]:
        text += f", steeper than tunnelling: displacement is about {_times(slope)} too small"
    elif slope < TUNNELLING[0]:
        text += f", flatter than tunnelling: displacement is about {_times(slope)} too large"
    return Finding("tunnelling slope", TUNNELLING[0] <= slope <= TUNNELLING[1], text)


def _times(slope: float) -> str:
    ratio = max(slope / 10.0, 10.0 / slope)
    return f"{ratio:.2g} times"


def _drive(part: Part, start: int, stop: int) -> Floats:
    if part.relative is not None:
        return part.relative[start:stop].astype(np.float64)
    row = int(np.searchsorted(part.offsets, start, side="right")) - 1
    return np.asarray(part.drive_step[row] * np.arange(stop - start), np.float64)


def direction(look: Look) -> Finding | None:
    """Find openings that close: the conductance of most must be lower at their end."""
    ends = [_ends(one) for one in look.values if np.isfinite(one).any()]
    ends = [(begin, end) for begin, end in ends if np.isfinite(begin) and np.isfinite(end)]
    if len(ends) < 5:
        return None
    closing = float(np.mean([abs(end) > 3 * abs(begin) for begin, end in ends]))
    if closing > 0.5:
        text = f"{closing:.0%} of the openings end higher than they begin: is cutting.pull_is the wrong way round?"
        return Finding("direction", False, text)
    return Finding("direction", True, "openings end lower than they begin")


def _ends(values: Floats) -> tuple[float, float]:
    share = max(len(values) // 20, 3)
    with np.errstate(invalid="ignore"):
        ends = (values[:share], values[-share:])
        begin, end = (float(np.nanmedian(one)) if np.isfinite(one).any() else float("nan") for one in ends)
    return begin, end


def _highest(values: Sequence[Floats]) -> float:
    return float(np.median([np.nanmax(one) for one in values if np.isfinite(one).any()]))


def both_ways(part: Part) -> Finding | None:
    """Compare what openings and closings read with the contact closed."""
    directions = np.array(part.cut.direction)
    opening, closing = np.flatnonzero(directions == "opening"), np.flatnonzero(directions == "closing")
    if len(opening) < 5 or len(closing) < 5:
        return None
    begin = np.array([_top(part, row) for row in opening[:200].tolist()])
    end = np.array([_top(part, row) for row in closing[:200].tolist()])
    begin, end = begin[np.isfinite(begin) & (begin > 0)], end[np.isfinite(end) & (end > 0)]
    if len(begin) == 0 or len(end) == 0:
        return None
    ratio = float(np.median(end) / np.median(begin))
    text = f"closings reach {ratio:.2g} times what openings begin with"
    return Finding("opening against closing", 0.1 < ratio < 10, text)


def _top(part: Part, row: int) -> float:
    values = part.conductance[int(part.offsets[row]) : int(part.offsets[row + 1])]
    return float(np.nanquantile(values, 0.98)) if np.isfinite(values).any() else float("nan")


def zero_level(look: Look, level: float) -> tuple[float | None, Finding]:
    """Return the level of zero that this recording proposes, and whether the stated one fits.

    A level fits where nearly all openings cross it and few samples linger near it.
    """
    values, pooled = look.values, look.pooled

    def crossing(at: float) -> float:
        return float(np.mean([np.nanmax(one) >= at > one[-1] for one in values if np.isfinite(one).any()]))

    def lingering(at: float) -> float:
        if not (pooled > 0).any():
            return 0.0
        return float(np.mean(np.abs(np.log10(np.maximum(pooled[pooled > 0], 1e-300) / at)) < NEAR_LEVEL))

    crossed, near = crossing(level), lingering(level)
    above = float(np.mean(pooled[pooled > 0] >= 0.01)) if (pooled > 0).any() else 0.0
    crowded = near > 0.25 * max(above, 1e-12)
    text = f"{crossed:.0%} of the openings cross {level:g} G0, {near:.2%} of the samples lie near it"
    if crossed < 0.8 and look.part.share_of(Quality.SATURATED) > 0 and _highest(values) < level:
        text += f", the amplifier is saturated above {_highest(values):.2g} G0"
    if crossed >= 0.8 and not crowded:
        return None, Finding("zero of displacement", True, text)
    candidates = [0.5, 0.3, 0.2, 0.1, 0.05, 0.02, 0.01, 5e-3, 2e-3, 1e-3, 5e-4, 1e-4]
    fitting = [one for one in candidates if crossing(one) >= 0.8 and lingering(one) <= 0.25 * max(above, 1e-12)]
    if not fitting:
        return None, Finding("zero of displacement", False, f"{text}; no level fits better")
    return fitting[0], Finding(
        "zero of displacement", False, f"{text}; {fitting[0]:g} G0 fits better (alignment.zero_at_g0)"
    )
