"""Check of the displacement: the fall of the conductance behind the last contact against tunnelling."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.intake.checks.findings import Finding, Look
from meseta.intake.checks.response import half_decades, passages

__all__ = ["tunnelling_slope"]

Floats = npt.NDArray[np.float64]
ANYWHERE: Final = (2.0, 15.0)
"""Decades per nm: 2 kappa / ln 10 of 0.2 to 11 eV, more than any work function; solvents lower the apparent barrier."""
IN_VACUUM: Final = (6.5, 15.0)
"""2.1 to 11 eV: in vacuum and in cold the barrier is that of a clean metal, 4 to 6 eV, with room."""
IN_LIQUID: Final = (2.0, 10.0)
COLD_KELVIN: Final = 60.0
"""Below it nothing is liquid that a junction is measured in."""
VACUUM_WORDS: Final = ("vacuum", "uhv", "cryogenic vacuum", "high vacuum")
LIKELY: Final = (3.5, 12.0)
FACTORS: Final = (2.0, 10.0, 100.0)
RANGE_G0: Final = (3e-5, 3e-3)
FLOOR_SIGMAS: Final = 10.0
FLOOR_STEPS: Final = 3.0
SLOW_SAMPLES: Final = 2.5
LEAST_SLOPES: Final = 10


def tunnelling_slope(look: Look) -> Finding | None:
    """Compare the fall of the conductance after the last contact with tunnelling.

    The median over all half decades between 3e-3 and 3e-5 G0, well above the floor, that are not passed in a jump.
    G ~ exp(-2 kappa d), kappa = sqrt(2 m_e phi)/hbar (textbook): 10 decades per nm for about 5 eV.
    """
    part = look.part
    if part.axis.unit != "nm":
        return None
    bounds = half_decades(RANGE_G0[1], max(RANGE_G0[0], look.floor.reach(FLOOR_SIGMAS, FLOOR_STEPS)))
    slopes: list[float] = []
    for (start, stop), values in zip(look.spans, look.values, strict=True):
        places = passages(values, bounds)
        slow = np.flatnonzero(np.diff(places) >= SLOW_SAMPLES)
        if len(slow):
            drive = np.abs(_drive(part, start, stop))
            at = np.interp(places, np.arange(len(drive)), drive)
            slopes += (0.5 / np.maximum(np.diff(at)[slow], 1e-12)).tolist()
    if len(slopes) < LEAST_SLOPES:
        hidden = look.floor.is_seen and len(bounds) < 2
        why = f"the floor hides it below {look.floor.reach(FLOOR_SIGMAS, FLOOR_STEPS):.2g} G0" if hidden else "too few"
        why = why if hidden else f"{why} openings fall slowly between {RANGE_G0[1]:g} and {bounds[-1]:.2g} G0"
        return Finding("tunnelling slope", True, f"{why}: nothing here tells whether the displacement is right")
    slope = float(np.median(slopes))
    lowest, highest, where = _expected(part.recording.metadata)
    text = f"the conductance falls by {slope:.3g} decades per nm between {RANGE_G0[1]:g} and {bounds[-1]:.2g} G0"
    if slope > highest:
        text += f", steeper than tunnelling{where}: displacement is about {_times(slope)} times too small"
    elif slope < lowest:
        text += f", flatter than tunnelling{where}: displacement is about {_times(slope)} times too large"
    return Finding("tunnelling slope", lowest <= slope <= highest, text)


def _expected(metadata: Mapping[str, Any]) -> tuple[float, float, str]:
    """Return the slopes to expect, by what the recording says of where the junction stands."""
    kelvin, medium = metadata.get("temperature_kelvin"), str(metadata.get("solvent", "")).strip().lower()
    if medium in VACUUM_WORDS:
        return *IN_VACUUM, " in vacuum"
    if isinstance(kelvin, int | float) and not isinstance(kelvin, bool) and 0 < kelvin < COLD_KELVIN:
        return *IN_VACUUM, f" at {kelvin:g} K"
    if medium and medium not in ("none", "no", "air", "-"):
        return *IN_LIQUID, " in a liquid"
    return *ANYWHERE, ""


def _times(slope: float) -> str:
    """Return by how much the displacement is off: 2, 10 or 100 where that makes it likely, else against 10 a nm."""
    for factor in FACTORS:
        for made in (slope / factor, slope * factor):
            if LIKELY[0] <= made <= LIKELY[1]:
                return f"{factor:g}"
    return f"{max(slope / 10.0, 10.0 / slope):.2g}"


def _drive(part: Part, start: int, stop: int) -> Floats:
    if part.relative is not None:
        return part.relative[start:stop].astype(np.float64)
    row = int(np.searchsorted(part.offsets, start, side="right")) - 1
    return np.asarray(part.drive_step[row] * np.arange(stop - start), np.float64)
