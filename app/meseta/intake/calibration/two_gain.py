"""Two amplifiers on one current: what their overlap says of their gains and offsets."""

from __future__ import annotations

from itertools import pairwise
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.calibration.amplifiers import ASSUMED_FULL_SCALE_VOLT
from meseta.intake.calibration.calibrate import Calibration
from meseta.intake.calibration.switching import Overlap
from meseta.intake.meaning.units import unit_factor
from meseta.intake.recording import Recording

__all__ = ["overlap_doubts", "overlap_of"]

Floats = npt.NDArray[np.float64]
PROBES: Final = 50
PROBE_SAMPLES: Final = 8000
BAND: Final = (0.1, 0.9)
"""Shares of full scale between which the high-gain channel is compared; below it the low-gain channel is noise."""
LEAST_SAMPLES: Final = 20
LEAST_GROUPS: Final = 5
ROUNDS: Final = 5
CLIP_SIGMAS: Final = 4.0


def overlap_of(recording: Recording, calibration: Calibration) -> Overlap | None:
    """Fit the currents of two amplifiers in their overlap, by least squares with outliers left out.

    Returns
    -------
    Overlap or None
        None where there is one amplifier, too little overlap, or gains that differ from piece to piece.
    """
    second = calibration.second
    names = ("gain_volt_per_ampere", "offset_volt", "high_gain_volt_per_ampere", "high_gain_offset_volt")
    constants = [calibration.constant(name) for name in names]
    full_scale = calibration.constant("full_scale_volt", ASSUMED_FULL_SCALE_VOLT)
    if second is None or any(np.ndim(value) for value in (*constants, full_scale)):
        return None
    gain, offset, high_gain, high_offset = (float(value) for value in constants)
    groups = []
    for at, stop in _stretches(recording.samples):
        low = recording.values(calibration.channel, at, stop) * unit_factor(calibration.channel.unit or "V", "V")
        high = recording.values(second, at, stop) * unit_factor(second.unit or "V", "V")
        share = np.abs(high) / float(full_scale)
        use = (share > BAND[0]) & (share < BAND[1]) & np.isfinite(low)
        groups.append((((low[use] - offset) / gain), (high[use] - high_offset) / high_gain))
    return _fitted([group for group in groups if len(group[0])])


def _stretches(samples: int) -> list[tuple[int, int]]:
    """Return stretches spread over the record that never overlap: the jackknife takes each for new."""
    edges = np.linspace(0, samples, PROBES + 1).astype(np.int64).tolist()
    return [(at, min(stop, at + PROBE_SAMPLES)) for at, stop in pairwise(edges) if stop > at]


def _fitted(groups: list[tuple[Floats, Floats]]) -> Overlap | None:
    """Return the line of the low-gain current against the high-gain one, turned round.

    The noise lies in the low-gain channel: taken as the variable that the other depends on, it would flatten the line.
    The error of the ratio is that of a jackknife over stretches of the record, as neighbouring samples share noise.
    """
    group = np.repeat(np.arange(len(groups)), [len(low) for low, _ in groups])
    low, high = (np.concatenate([pair[side] for pair in groups] or [np.empty(0)]) for side in (0, 1))
    for _ in range(ROUNDS):
        if len(low) < LEAST_SAMPLES or np.ptp(high) == 0:
            return None
        slope, level = _line(high, low)
        rest = low - level - slope * high
        sigma = float(np.sqrt(np.mean(rest**2)))
        keep = np.abs(rest) <= CLIP_SIGMAS * sigma
        if keep.all():
            break
        low, high, group = low[keep], high[keep], group[keep]
    slope, level = _line(high, low)
    if slope == 0:
        return None
    error = sigma / float(np.sqrt(np.sum((high - high.mean()) ** 2)))
    there = np.unique(group)
    if len(there) >= LEAST_GROUPS:
        without = np.array([_line(high[group != one], low[group != one])[0] for one in there.tolist()])
        share = (len(there) - 1) / len(there)
        error = max(error, float(np.sqrt(share * np.sum((without - without.mean()) ** 2))))
    return Overlap(1.0 / slope, error / slope**2, -level / slope, len(low))


def _line(x: Floats, y: Floats) -> tuple[float, float]:
    """Return (slope, value at zero) of the least-squares line."""
    centre, middle = x.mean(), y.mean()
    slope = float(np.sum((x - centre) * (y - middle)) / np.sum((x - centre) ** 2))
    return slope, float(middle - slope * centre)


def overlap_doubts(calibration: Calibration) -> tuple[str, ...]:
    """Return what is doubtful of a two-gain recording, in words; nothing where there is one amplifier."""
    if calibration.second is None:
        return ()
    doubts = []
    if "full_scale_volt" not in calibration.constants:
        doubts.append(
            f"two amplifiers, but no full scale is stated: the switch between them is made as if it were "
            f"{ASSUMED_FULL_SCALE_VOLT:g} V (calibration.full_scale_volt)"
        )
    found = calibration.overlap
    if found is None:
        unused = ", and their ratio cannot be taken from there" if calibration.is_scaled_by_overlap else ""
        text = "both amplifiers are in range together too seldom to check their gains against each other"
        return (*doubts, text + unused)
    text = (
        f"in the overlap the second amplifier reads {found.ratio:.4g} +- {found.ratio_error:.2g} times the first, "
        f"offset {found.offset_ampere:.3g} A ({found.samples} samples)"
    )
    if found.ratio < 0:
        text += ": one of the two gains has the wrong sign"
    elif calibration.is_scaled_by_overlap:
        text += ": it is scaled by this"
    elif not found.fits:
        text += ": the two gains do not fit each other (calibration.gain_ratio_from_overlap)"
    return (*doubts, text)
