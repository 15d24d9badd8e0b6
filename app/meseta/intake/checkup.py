"""Calibration check-up: what the numbers of a recording say of its own calibration.

Each check compares something measured with something known: the converter's step, the pile-up at full scale, the floor
against thermal noise, the place of the single-atom peak, the tunnelling slope, opening against closing.  Findings name
factors of 2, 10 and 100, signs and dividers as such; they change no number.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.quantities import G0_SIEMENS, johnson_current_rms
from meseta.recipe.alignment import AlignmentSettings
from meseta.traces import Quality

__all__ = ["Finding", "check_up"]

Floats = npt.NDArray[np.float64]
LEAST_SAMPLES: Final = 200
MOST_SAMPLES: Final = 2_000_000
"""About so many samples of openings are looked at, so that a long recording takes no more memory than a short one."""
PEAK_SEARCH: Final = (-2.6, 2.6)
FACTORS: Final = {0.01: "100", 0.1: "10", 0.5: "2", 2.0: "2", 10.0: "10", 100.0: "100"}
SINGLE_ATOM_G0: Final = (0.7, 2.6)
"""Where single-atom peaks of metals lie, with room: 1 to 2.5 G0 for Pt (Nielsen et al., PRB 67, 245411)."""
TUNNELLING: Final = (2.0, 25.0)
"""Decades per nm from solvent to vacuum (2 kappa / ln 10 is 10 for about 5 eV), with room on both sides."""
ROOM_KELVIN: Final = 300.0
PILE_UP: Final = 0.002
NEAR_LEVEL: Final = 0.02
LEAST_LEVELS: Final = 10
NEAR_ZERO_LEVELS: Final = 41
STEPPED_SHARE: Final = 0.2
"""Readings come in steps where fewer different values than this share of the samples occur."""


@dataclass(frozen=True)
class Finding:
    """One check: its name, whether all is well, and what was found in words."""

    check: str
    fine: bool
    text: str

    def line(self) -> str:
        """Return the finding in one line."""
        return f"{'ok' if self.fine else '! '} {self.check}: {self.text}"


def check_up(part: Part, alignment: AlignmentSettings) -> tuple[tuple[Finding, ...], float | None]:
    """Return the findings on a loaded part, and the level of zero that its recording proposes (None where any fits).

    Parameters
    ----------
    part : Part
        With its samples loaded and directions settled.
    alignment : AlignmentSettings
    """
    rows = np.flatnonzero(np.array(part.cut.direction) == "opening")
    usual = float(np.median(np.diff(part.offsets))) if part.traces else 1.0
    most = int(np.clip(MOST_SAMPLES / max(usual, 1.0), 20, 200))
    chosen = rows[np.linspace(0, len(rows) - 1, min(len(rows), most)).astype(int)] if len(rows) else rows
    spans = [(start, min(stop, start + MOST_SAMPLES)) for start, stop in _pulls(part, chosen)]
    values = [_trusted(part, a, b) for a, b in spans if b > a]
    if sum(len(one) for one in values) < LEAST_SAMPLES:
        return (), None
    pooled = np.concatenate(values)
    found = [_sign(values), _full_scale(part), _step(part), _floor(part, pooled), _single_atom(pooled)]
    found += [_slope(part, spans), _both_ways(part)]
    found.append(_gain_ratio(part))
    zero, finding = _zero_level(pooled, values, alignment.zero_at_g0)
    return tuple(one for one in (*found, finding) if one is not None), zero


def _trusted(part: Part, start: int, stop: int) -> Floats:
    """Return the conductance of a range with NaN where the amplifier was saturated."""
    values = part.conductance[start:stop].astype(np.float64)
    if part.quality is not None:
        values[part.quality[start:stop] & Quality.SATURATED > 0] = np.nan
    return values


def _pulls(part: Part, rows: npt.NDArray[np.int64]) -> list[tuple[int, int]]:
    ranges = {phase[0]: (phase[1], phase[2]) for phase in reversed(part.cut.phases) if phase[3] == 1}
    return [
        (int(part.offsets[row]) + ranges[row][0], int(part.offsets[row]) + ranges[row][1])
        for row in rows.tolist()
        if row in ranges
    ]


def _sign(values: list[Floats]) -> Finding | None:
    """Find a recording that is upside down: closed contacts must not read negative."""
    begins = np.array([np.nanmedian(one[: max(len(one) // 20, 3)]) for one in values if np.isfinite(one).any()])
    if len(begins) == 0:
        return None
    negative = float(np.mean(begins < 0))
    if negative > 0.5:
        return Finding("sign", False, f"{negative:.0%} of the openings begin negative: gain or bias has the wrong sign")
    return Finding("sign", True, "openings begin positive")


def _full_scale(part: Part) -> Finding | None:
    """Find the pile-up of samples at the amplifier's end."""
    if part.calibration.kind not in ("linear", "logarithmic"):
        return None
    if part.quality is not None:
        share = part.share_of(Quality.SATURATED)
        return Finding("full scale", True, f"{share:.2%} of the samples are saturated and marked")
    stored = np.asarray(part.recording.stored(part.calibration.channel, 0, min(part.recording.samples, 2_000_000)))
    if len(stored) == 0:
        return None
    top = float(np.mean(stored == np.nanmax(stored)))
    if top > PILE_UP:
        text = f"{top:.2%} of the samples stand at the highest reading: set calibration.full_scale_volt"
        return Finding("full scale", False, text)
    return Finding("full scale", True, "no pile-up at the highest reading")


def _gain_ratio(part: Part) -> Finding | None:
    """Compare the two amplifiers of a two-gain recording where both are in range."""
    overlap = part.calibration.overlap
    if overlap is None:
        return None
    text = f"the second amplifier reads {overlap.ratio:.4g} +- {overlap.ratio_error:.2g} times the first in the overlap"
    if part.calibration.is_scaled_by_overlap:
        return Finding("gain ratio", True, f"{text}, and is scaled by it")
    return Finding("gain ratio", overlap.fits, text if overlap.fits else f"{text}: the two gains do not fit each other")


def _step(part: Part) -> Finding | None:
    """Compare the converter's step with the noise at the floor."""
    if part.calibration.kind not in ("linear", "conductance", "current"):
        return None
    values = part.conductance[: min(len(part.conductance), 500_000)].astype(np.float64)
    values = values[np.isfinite(values)]
    levels = np.unique(values)
    if len(levels) < LEAST_LEVELS:
        return None
    near_zero = np.sort(levels[np.argsort(np.abs(levels))[:NEAR_ZERO_LEVELS]])
    small = values[np.abs(values) <= np.quantile(np.abs(values), 0.3)]
    step, noise = float(np.median(np.diff(near_zero))), float(np.std(small))
    is_stepped = len(np.unique(small)) < STEPPED_SHARE * len(small)
    if is_stepped and step > noise:
        return Finding("converter step", False, f"one step is {step:.2g} G0, coarser than the noise of {noise:.2g} G0")
    return Finding("converter step", True, f"one step of at most {step:.2g} G0 against a noise of {noise:.2g} G0")


def _floor(part: Part, pooled: Floats) -> Finding | None:
    """Compare the floor with thermal noise: a floor quieter than physics means a wrong gain or bias."""
    if not np.isfinite(part.interval_second) or part.interval_second <= 0:
        return None
    finite = pooled[np.isfinite(pooled)]
    low = finite[finite <= np.quantile(finite, 0.2)]
    sigma = 1.4826 * float(np.median(np.abs(low - np.median(low)))) if len(low) else 0.0
    bias = _bias(part)
    if not bias or sigma == 0.0:
        return None
    level = max(abs(float(np.median(low))), sigma)
    thermal = float(johnson_current_rms(level, ROOM_KELVIN, 0.5 / part.interval_second)) / (abs(bias) * G0_SIEMENS)
    text = f"noise of {sigma:.2g} G0 with the contact open; thermal noise alone gives up to {thermal:.2g} G0 at 300 K"
    return Finding("floor", sigma > 0.02 * thermal, text)


def _bias(part: Part) -> float:
    known = part.calibration.constants.get("bias_volt")
    value = np.asarray(known[0] if known else part.recording.metadata.get("bias_volt", 0.0))
    return float(np.median(value)) if value.dtype.kind in "fiu" else 0.0


def peak_position(pooled: Floats) -> float | None:
    """Return the conductance at which metallic contacts pile up most, in G0; None where no peak stands out.

    Looked for as the strongest rise above a smooth histogram in log G; each decade step counts alike.
    """
    positive = pooled[pooled > 0]
    logs = np.log10(positive)
    edges = np.arange(PEAK_SEARCH[0], PEAK_SEARCH[1] + 0.02, 0.02)
    counts = np.histogram(logs, edges)[0].astype(np.float64)
    if counts.sum() < LEAST_SAMPLES:
        return None
    narrow = np.convolve(counts, np.ones(3) / 3, "same")
    wide = np.convolve(counts, np.ones(31) / 31, "same")
    excess = (narrow - wide) / np.sqrt(wide + 1.0)
    place = int(np.argmax(excess))
    if excess[place] < 5.0 or narrow[place] < 1.6 * wide[place]:
        return None
    return float(10 ** ((edges[place] + edges[place + 1]) / 2))


def _single_atom(pooled: Floats) -> Finding | None:
    """Compare the strongest metallic peak with 1 G0, where single atoms of monovalent metals stand.

    Nearly 1 G0 for Na, Cu, Au, Ag (Krans et al., PRB 48, 14721; Gai et al., PRB 53, 1042); other metals differ, so only
    factors of 2, 10 and 100 are named, as questions.
    """
    position = peak_position(pooled)
    if position is None:
        return None
    for factor, word in FACTORS.items():
        if abs(np.log10(position / factor)) < (0.03 if factor in (0.5, 2.0) else 0.06):
            side = "high" if factor > 1 else "low"
            text = (
                f"contacts pile up at {position:.3g} G0, a factor {word} too {side} for single atoms: "
                f"is gain, bias or a divider off by {word}?"
            )
            return Finding("single-atom peak", False, text)
    if abs(np.log10(position)) < 0.08:
        return Finding("single-atom peak", True, f"contacts pile up at {position:.3g} G0")
    plausible = SINGLE_ATOM_G0[0] <= position <= SINGLE_ATOM_G0[1]
    text = f"contacts pile up at {position:.3g} G0; for a monovalent metal 1 is expected"
    return Finding("single-atom peak", plausible, text if plausible else f"{text}, for no metal this")


def _slope(part: Part, spans: list[tuple[int, int]]) -> Finding | None:
    """Compare the fall of the conductance after the last contact with tunnelling."""
    if part.axis.unit != "nm":
        return None
    slopes = []
    for start, stop in spans:
        values = part.conductance[start:stop].astype(np.float64)
        drive = _drive(part, start, stop)
        above = np.flatnonzero(values >= 0.1)
        inside = np.flatnonzero((values < 3e-3) & (values > 3e-5))
        inside = inside[inside > above[-1]] if len(above) else inside[:0]
        if len(inside) >= 5:
            inside = inside[: np.argmax(np.diff(inside) > 3) + 1] if np.any(np.diff(inside) > 3) else inside
            span = drive[inside[-1]] - drive[inside[0]]
            fall = np.log10(values[inside[0]] / values[inside[-1]])
            if span > 0 and fall > 0.3:
                slopes.append(fall / span)
    if len(slopes) < 5:
        return None
    steepest = float(np.quantile(slopes, 0.75))
    text = f"the conductance falls by {steepest:.3g} decades per nm between 3e-3 and 3e-5 G0"
    if steepest > TUNNELLING[1]:
        return Finding(
            "tunnelling slope",
            False,
            f"{text}, steeper than tunnelling: displacement is about {_times(steepest)} too small",
        )
    if steepest < TUNNELLING[0]:
        return Finding(
            "tunnelling slope",
            False,
            f"{text}, flatter than tunnelling: displacement is about {_times(steepest)} too large",
        )
    return Finding("tunnelling slope", True, text)


def _times(slope: float) -> str:
    ratio = max(slope / 10.0, 10.0 / slope)
    return f"{ratio:.2g} times"


def _drive(part: Part, start: int, stop: int) -> Floats:
    if part.relative is not None:
        return part.relative[start:stop].astype(np.float64)
    row = int(np.searchsorted(part.offsets, start, side="right")) - 1
    return np.asarray(part.drive_step[row] * np.arange(stop - start), np.float64)


def _both_ways(part: Part) -> Finding | None:
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


def _zero_level(pooled: Floats, values: list[Floats], level: float) -> tuple[float | None, Finding]:
    """Return the level of zero that this recording proposes, and whether the stated one fits.

    A level fits where nearly all openings cross it and few samples linger near it.
    """

    def crossing(at: float) -> float:
        return float(np.mean([np.nanmax(one) >= at > one[-1] for one in values if np.isfinite(one).any()]))

    def lingering(at: float) -> float:
        return float(np.mean(np.abs(np.log10(np.maximum(pooled[pooled > 0], 1e-300) / at)) < NEAR_LEVEL))

    crossed, near = crossing(level), lingering(level)
    above = float(np.mean(pooled[pooled > 0] >= 0.01)) if (pooled > 0).any() else 0.0
    crowded = near > 0.25 * max(above, 1e-12)
    text = f"{crossed:.0%} of the openings cross {level:g} G0, {near:.2%} of the samples lie near it"
    if crossed >= 0.8 and not crowded:
        return None, Finding("zero of displacement", True, text)
    candidates = [0.5, 0.3, 0.2, 0.1, 0.05, 0.02, 0.01, 5e-3, 2e-3, 1e-3, 5e-4, 1e-4]
    fitting = [one for one in candidates if crossing(one) >= 0.8 and lingering(one) <= 0.25 * max(above, 1e-12)]
    if not fitting:
        return None, Finding("zero of displacement", False, f"{text}; no level fits better")
    return fitting[0], Finding(
        "zero of displacement", False, f"{text}; {fitting[0]:g} G0 fits better (alignment.zero_at_g0)"
    )
