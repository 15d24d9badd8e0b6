"""Checks of the contacts: sign, direction, opening against closing, the zero of displacement."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.intake.checks.findings import Finding, Look
from meseta.traces import Quality

__all__ = ["both_ways", "direction", "sign", "zero_level"]

Floats = npt.NDArray[np.float64]
NEAR_LEVEL: Final = 0.02
STAYS: Final = 3
"""Samples that must lie below for a crossing to count, as in the default of alignment.stay_samples."""
MOST_WAVERING: Final = 0.3
"""Of the openings; contacts that close again after they broke are fewer (common practice, no source)."""
LEAST_OPENINGS: Final = 5
CHANCE_SIGMAS: Final = 3.0
LEAST_CONTACT_G0: Final = 0.01
"""What reads less at both ends may be noise round zero: a recording without contacts."""
BELOW_ZERO_SIGMAS: Final = 3.0
BELOW_ZERO_SHARE: Final = 0.003
LEAST_BELOW_G0: Final = 1e-9


def sign(look: Look) -> Finding | None:
    """Find a recording that is upside down, and a floor that lies below zero by more than its noise."""
    begins = look.begins[~np.isnan(look.begins)]
    if len(begins) == 0:
        return None
    negative = float(np.mean(begins < 0))
    ends = look.ends[np.isfinite(look.ends)]
    low = float(np.median(ends)) if len(ends) >= LEAST_OPENINGS else 0.0
    size = float(np.median(np.abs(begins)))
    is_contact = size > 3 * abs(low) or size > LEAST_CONTACT_G0
    if negative > 0.5 + CHANCE_SIGMAS * 0.5 / np.sqrt(len(begins)) and is_contact:
        return Finding("sign", False, f"{negative:.0%} of the openings begin negative: gain or bias has the wrong sign")
    if low < -_tolerated_below(look, size):
        return Finding("sign", False, f"openings begin positive but end at {low:.2g} G0: {_why_below(look.part)}")
    return Finding("sign", True, "openings begin positive")


def _tolerated_below(look: Look, closed: float) -> float:
    """Return how far below zero an open contact may read: its noise, where that is seen, or a share of the closed one.

    A logarithmic amplifier spans many decades, so that its own offset is a far smaller share.
    """
    share = BELOW_ZERO_SHARE * closed
    seen = BELOW_ZERO_SIGMAS * look.floor.blur_g0 if look.floor.is_seen else share
    return max(min(seen, share) if look.part.calibration.kind == "logarithmic" else seen, LEAST_BELOW_G0)


def _why_below(part: Part) -> str:
    if part.calibration.kind == "logarithmic":
        return "does the logarithmic amplifier show sizes only? (calibration.log_polarity)"
    return "is an offset left? (calibration.offset_volt, calibration.offset_from_floor)"


def direction(look: Look) -> Finding | None:
    """Find openings that close: the conductance of most must be lower at their end."""
    known = ~np.isnan(look.begins) & ~np.isnan(look.ends)
    begins, ends = np.abs(look.begins[known]), np.abs(look.ends[known])
    if len(begins) < LEAST_OPENINGS:
        return None
    closing = float(np.mean(ends > 3 * begins))
    if closing > 0.5:
        text = f"{closing:.0%} of the openings end higher than they begin: is cutting.pull_is the wrong way round"
        if look.part.calibration.kind == "logarithmic":
            text += ", or has the logarithmic amplifier the opposite polarity (sign of calibration.volt_per_decade)"
        return Finding("direction", False, f"{text}?")
    return Finding("direction", True, "openings end lower than they begin")


def _highest(values: Sequence[Floats]) -> float:
    highest = [np.nanmax(one) for one in values if np.isfinite(one).any()]
    return float(np.median(highest)) if highest else float("nan")


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


def _crosses_back(values: Floats, level: float) -> bool:
    """Return whether an opening falls below a level, stays there for some samples, and comes back above it."""
    values = values[np.isfinite(values)]
    above = np.flatnonzero(values >= level)
    return bool(len(above) > 1 and np.diff(above).max() > STAYS)


def zero_level(look: Look, level: float) -> tuple[float | None, Finding]:
    """Return the level of zero that this recording proposes, and whether the stated one fits.

    A level fits where nearly all openings cross it, few samples linger near it, and few openings cross it back and
    forth, as those with a plateau at it do.
    """
    values, pooled = look.values, look.pooled
    seen = [one for one in values if np.isfinite(one).any()]

    def crossing(at: float) -> float:
        return float(np.mean([np.nanmax(one) >= at > one[-1] for one in seen])) if seen else 0.0

    def lingering(at: float) -> float:
        if not (pooled > 0).any():
            return 0.0
        return float(np.mean(np.abs(np.log10(np.maximum(pooled[pooled > 0], 1e-300) / at)) < NEAR_LEVEL))

    def wavering(at: float) -> float:
        return float(np.mean([_crosses_back(one, at) for one in seen])) if seen else 0.0

    crossed, near, back = crossing(level), lingering(level), wavering(level)
    above = float(np.mean(pooled[pooled > 0] >= 0.01)) if (pooled > 0).any() else 0.0
    crowded = near > 0.25 * max(above, 1e-12)
    text = f"{crossed:.0%} of the openings cross {level:g} G0, {near:.2%} of the samples lie near it"
    if crossed < 0.8 and look.part.share_of(Quality.SATURATED) > 0 and _highest(values) < level:
        text += f", the amplifier is saturated above {_highest(values):.2g} G0"
    if back > MOST_WAVERING:
        text += (
            f", {back:.0%} cross it back and forth: the last crossing lies within a plateau (alignment.crossing = jump)"
        )
    if crossed >= 0.8 and not crowded and back <= MOST_WAVERING:
        return None, Finding("zero of displacement", True, text)
    candidates = [0.5, 0.3, 0.2, 0.1, 0.05, 0.02, 0.01, 5e-3, 2e-3, 1e-3, 5e-4, 1e-4]
    fitting = [
        one
        for one in candidates
        if crossing(one) >= 0.8 and lingering(one) <= 0.25 * max(above, 1e-12) and wavering(one) <= MOST_WAVERING
    ]
    if not fitting:
        return None, Finding("zero of displacement", False, f"{text}; no level fits better")
    return fitting[0], Finding(
        "zero of displacement", False, f"{text}; {fitting[0]:g} G0 fits better (alignment.zero_at_g0)"
    )
