"""Check of the conductance scale: where contacts pile up against the conductance of single atoms."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.intake.checks.findings import Finding, Look, look_at
from meseta.intake.cutting.cuts import PUSH
from meseta.quantities import G0_SIEMENS

__all__ = ["peak_positions", "single_atom", "upside_down"]

Floats = npt.NDArray[np.float64]
LEAST_SAMPLES: Final = 200
PEAK_SEARCH: Final = (-2.6, 5.0)
BIN_DECADES: Final = 0.02
LEAST_STRENGTH: Final = 5.0
APART_BINS: Final = 7
NEAR_DECADES: Final = 0.03
FLOOR_SIGMAS: Final = 8.0
FACTORS: Final = {0.01: "100", 0.1: "10", 0.5: "2", 2.0: "2", 10.0: "10", 100.0: "100"}
ROOM_DECADES: Final = 0.045
"""A factor is named where the peak, divided by it, lies within a tenth of what is expected."""
MONOVALENT_G0: Final = (0.83, 1.2)
"""Nearly 1 G0 for Na, Cu, Au, Ag (Krans et al., PRB 48, 14721; Gai et al., PRB 53, 1042), with room."""
ANY_METAL_G0: Final = (0.7, 2.6)
"""Where single-atom peaks of metals lie, with room: 1 to 2.5 G0 for Pt (Nielsen et al., PRB 67, 245411)."""
OF_METAL_G0: Final = {
    **dict.fromkeys(("au", "gold", "ag", "silver", "cu", "copper", "na", "sodium", "k", "potassium"), MONOVALENT_G0),
    **dict.fromkeys(("pt", "platinum"), (1.2, 2.1)),
    **dict.fromkeys(("pd", "palladium", "ni", "nickel"), (1.2, 2.1)),
    **dict.fromkeys(("al", "aluminium", "aluminum"), (0.65, 1.35)),
}
"""Pt 1.5 and 1.8 G0 (Nielsen et al.); Ni, Pd, Pt of the order of 1.6 (Bakker et al., PRB 65, 235416); Al about 1, less
well defined than Cu (Krans et al.); each with room."""
ODD_G0: Final = (0.2, 4.0)
"""Between these a peak that belongs to no single atom is odd; further away it is a molecule, or a thick contact."""
BESIDE_SHARE: Final = 0.3
"""Of the strongest peak: what stands out as much beside it is a peak of its own."""
LEAST_CLOSINGS: Final = 5
LEAST_OPENINGS: Final = 10
"""In fewer openings two or three atoms may by chance be drawn out more often than one."""
DECADE_ROOM: Final = 0.03
FACTORS_END_G0: Final = 300.0
"""Thicker contacts than this are not drawn out to single atoms in one trace."""
BEGIN_SAMPLES: Final = 20
STILL: Final = 1e-3


def peak_positions(pooled: Floats, below_g0: float = np.inf, above_g0: float = 0.0) -> list[tuple[float, float]]:
    """Return (G0, how many standard deviations it stands out) of where contacts pile up, the strongest first.

    Looked for as rises above a smooth histogram in log G, in which each decade step counts alike; what lies at or above
    ``below_g0`` is the closed contact that traces begin with, what lies at or below ``above_g0`` may be floor.
    """
    logs = np.log10(pooled[(pooled > max(above_g0, 0.0)) & (pooled < below_g0)])
    edges = np.arange(PEAK_SEARCH[0], PEAK_SEARCH[1] + BIN_DECADES, BIN_DECADES)
    counts = np.histogram(logs, edges)[0].astype(np.float64)
    if counts.sum() < LEAST_SAMPLES:
        return []
    narrow = np.convolve(counts, np.ones(3) / 3, "same")
    wide = np.convolve(counts, np.ones(31) / 31, "same")
    excess = (narrow - wide) / np.sqrt(wide + 1.0)
    found: list[tuple[float, float]] = []
    while True:
        place = int(np.argmax(excess))
        if excess[place] < LEAST_STRENGTH:
            return found
        if narrow[place] >= 1.6 * wide[place]:
            middle = 0.5 * float(edges[place] + edges[place + 1])
            near = logs[np.abs(logs - middle) < NEAR_DECADES]
            found.append((float(10 ** np.median(near)) if len(near) else 10**middle, float(excess[place])))
        excess[max(place - APART_BINS, 0) : place + APART_BINS + 1] = 0.0


def single_atom(look: Look) -> Finding | None:
    """Compare the strongest metallic peak with the conductance of single atoms.

    Of the metal where the recording names its electrodes, else of monovalent ones; as metals differ, only factors of 2,
    10 and 100 are named then, as questions.
    """
    peaks = peak_positions(look.pooled, _closed(look), look.floor.reach(FLOOR_SIGMAS, FLOOR_SIGMAS))
    if not peaks:
        return None
    position, strength = peaks[0]
    metal, low, high = _expected(look.part.recording.metadata)
    text = f"contacts pile up at {position:.3g} G0"
    if metal and low <= position <= high:
        return Finding("single-atom peak", True, f"{text}, as single atoms of {metal} do")
    near = [at for at, height in peaks if low <= at <= high and height > BESIDE_SHARE * strength]
    if near and position > high:  # two atoms or more, as often as one: nothing lies below those of a wrong scale
        return Finding("single-atom peak", True, f"contacts pile up at {near[0]:.3g} G0, and at {position:.3g} G0")
    few = look.part.cut.direction.count("opening") < LEAST_OPENINGS
    for factor, word in FACTORS.items():
        if few and word == "2":
            continue
        if _is_off(position, factor, (low, high) if metal else (1.0, 1.0)):
            if near and word != "2":  # a molecule beside single atoms where they should be
                return Finding("single-atom peak", True, f"contacts pile up at {near[0]:.3g} G0")
            side = "high" if factor > 1 else "low"
            text += f", a factor {word} too {side} for single atoms: is gain, bias or a divider off by {word}?"
            return Finding("single-atom peak", False, text + _decade_question(look.part, position))
    if not metal and low <= position <= high:
        return Finding("single-atom peak", True, text)
    if not metal and ANY_METAL_G0[0] <= position <= ANY_METAL_G0[1]:
        return Finding("single-atom peak", True, f"{text}; for a monovalent metal 1 is expected")
    is_scale = not near and _is_decade_factor(_right_decade(look.part, position))
    if few and ODD_G0[0] <= position <= FACTORS_END_G0:
        return Finding("single-atom peak", True, f"{text}; there are too few openings to judge it by")
    if ODD_G0[0] <= position <= ODD_G0[1] or position > FACTORS_END_G0 or is_scale:
        expected = f"for {metal} {low:g} to {high:g}" if metal else "for a monovalent metal 1"
        text += f"; {expected} is expected" + ("" if metal else ", and no metal is known for this")
        question = _decade_question(look.part, position)
        return Finding("single-atom peak", False, text + (f".{question}" if question else ""))
    return None


def upside_down(part: Part) -> Finding | None:
    """Find a logarithmic amplifier of the opposite polarity where nothing but the conductance tells directions.

    Every trace then seems to close; single atoms show once the volts are taken the other way round, I_ref^2/I, and not
    as they are.
    """
    if part.calibration.kind != "logarithmic" or "opening" in part.cut.direction or part.traces < LEAST_CLOSINGS:
        return None
    pooled = look_at(part, "closing", PUSH).pooled
    reference, volt = float(np.median(part.calibration.constant("reference_ampere"))), _bias(part)
    if not reference or not volt or _shows_atoms(pooled):
        return None
    with np.errstate(divide="ignore"):
        turned = (reference / (volt * G0_SIEMENS)) ** 2 / pooled
    if not _shows_atoms(turned[np.isfinite(turned)]):
        return None
    text = f"all {part.traces} traces close, and none shows single atoms; with the volts the other way round they do"
    return Finding(
        "direction",
        False,
        f"{text}: has the logarithmic amplifier the opposite polarity (sign of calibration.volt_per_decade)?",
    )


def _shows_atoms(pooled: Floats) -> bool:
    return any(ANY_METAL_G0[0] <= at <= ANY_METAL_G0[1] for at, _ in peak_positions(pooled))


def _bias(part: Part) -> float:
    """Return the size of the bias at the junction; 0 where it is recorded and not stated."""
    return abs(float(np.median(part.calibration.bias_at_junction_volt)))


def _is_off(position: float, factor: float, expected: tuple[float, float]) -> bool:
    """Return whether a position divided by a factor is one that is expected."""
    room = 10**ROOM_DECADES
    return expected[0] / room <= position / factor <= expected[1] * room


def _expected(metadata: Mapping[str, Any]) -> tuple[str, float, float]:
    """Return (metal, lowest, highest) of single atoms; no name where the recording does not say, or it is not known."""
    named = str(metadata.get("electrode", metadata.get("metal", ""))).strip()
    if named.lower() in OF_METAL_G0:
        return named, *OF_METAL_G0[named.lower()]
    return "", *MONOVALENT_G0


def _closed(look: Look) -> float:
    """Return the conductance from which on a reading is the closed contact; infinite where that is saturated."""
    begins = [one[:BEGIN_SAMPLES] for one in look.values]
    middles = np.array([np.median(one) if np.isfinite(one).all() and len(one) else np.inf for one in begins])
    closed = float(np.median(middles)) if len(middles) else np.inf
    if not (np.isfinite(closed) and closed > 0):
        return float("inf")
    spans = [np.ptp(one) for one, middle in zip(begins, middles, strict=True) if np.isfinite(middle)]
    return (1 - STILL if float(np.median(spans)) < STILL * closed else 0.8) * closed


def _decade_question(part: Part, position: float) -> str:
    """Return in words which volts per decade would bring the peak of a logarithmic amplifier to 1 G0."""
    made, stated = _right_decade(part, position)
    if not made:
        return ""
    return f" Or calibration.volt_per_decade, {made:.3g} V would do it instead of {stated:.3g} V"


def _is_decade_factor(decade: tuple[float, float]) -> bool:
    """Return whether the volts per decade that would be right differ from the stated ones by a factor of 2 or 10."""
    made, stated = decade
    return made != 0.0 and any(abs(made / stated / factor - 1.0) < DECADE_ROOM for factor in (0.1, 0.5, 2.0, 10.0))


def _right_decade(part: Part, position: float) -> tuple[float, float]:
    """Return (volts per decade that bring a position to 1 G0, the stated ones); zeros where there are none."""
    if part.calibration.kind != "logarithmic":
        return 0.0, 0.0
    names = ("volt_per_decade", "reference_ampere")
    stated, reference = (float(np.median(part.calibration.constant(name))) for name in names)
    one_atom = _bias(part) * G0_SIEMENS / reference
    if one_atom <= 0 or abs(np.log10(one_atom)) < 0.5:
        return 0.0, 0.0
    return stated * float(np.log10(position * one_atom) / np.log10(one_atom)), stated
