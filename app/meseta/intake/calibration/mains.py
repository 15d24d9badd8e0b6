"""Mains pickup: 50 or 60 Hz and harmonics on the continuous record, fitted before anything is cut.

Pickup adds to the current whatever the contact does.  It is fitted where the contact is open, on stretches that lie
near the floor, each less its own mean, so that neither steps nor drift take part.  The record is fitted in windows of
about a second with one common frequency; amplitude and phase follow the mains from window to window.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.calibration.mains_floor import NOMINAL_HERTZ, floor_band, probes_of, runs_within, windows_of
from meseta.intake.recording import Recording

__all__ = ["Pickup", "find_pickup"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Read = Callable[[int, int], Floats]
SEARCH_HERTZ: Final = 0.6
"""How far from the nominal value the frequency is looked for; mains stray less, clocks of converters may not."""
SEARCH_STEP_HERTZ: Final = 0.1
HARMONICS: Final = 3
THINNED_HERTZ: Final = 2000.0
"""Probes are averaged down to about this rate to find the frequency."""
LIVELY: Final = 2.0
ROUNDS: Final = 4
"""A stretch of which the fit leaves more than twice the usual mean square holds a decay or a step and takes no part."""
SIGNIFICANT_SIGMAS: Final = 5.0
MAD_TO_SIGMA: Final = 1.482602218505602
LEAST_STEPS: Final = 4


@dataclass(frozen=True)
class Pickup:
    """What the mains add to one channel.

    Attributes
    ----------
    frequency_hertz : float
        Common frequency of the fundamental, refined.
    amplitude : (harmonics,) float64
        Median amplitude of the fundamental and its multiples, in the channel's unit.
    noise : float
        Standard deviation of what the fit leaves at the floor.
    amplitude_error : float
        Standard error of one window's amplitude: from that noise, taken as white, or from how much the fundamental
        differs between neighbouring windows, whichever is larger.
    unit : str
    cycles_a_sample : float
    at : (anchors,) int64
        Flat samples at which ``parts`` hold; the ends of every piece are among them.
    parts : (anchors, 2 harmonics) float64
        cos and sin parts of each harmonic, phase counted from flat sample 0.
    floor_share : float
        Share of the samples looked at that took part.
    """

    frequency_hertz: float
    amplitude: Floats
    noise: float
    amplitude_error: float
    unit: str
    cycles_a_sample: float
    at: Integers
    parts: Floats
    floor_share: float

    @property
    def is_significant(self) -> bool:
        """Return whether the fundamental, or any harmonic, stands out of the noise."""
        return bool(self.amplitude.max() > SIGNIFICANT_SIGMAS * self.amplitude_error)

    def text(self) -> str:
        """Return frequency and amplitudes in words."""
        sizes = ", ".join(
            f"{size:.3g} {self.unit} at {(place + 1) * self.frequency_hertz:.4g} Hz"
            for place, size in enumerate(self.amplitude.tolist())
        )
        return f"{self.frequency_hertz:.3f} Hz, amplitude {sizes} (+- {self.amplitude_error:.2g} a second of record)"

    def subtract(self, values: Floats, start: int) -> None:
        """Subtract the pickup from the channel's values from flat sample ``start`` on, in place."""
        from meseta.intake.calibration.kernels import subtract_pickup

        subtract_pickup(values, start, self.cycles_a_sample, self.at, self.parts)


def find_pickup(
    recording: Recording, read: Read, unit: str, interval_second: float, most_windows: int | None = None
) -> Pickup | None:
    """Fit the mains pickup of one channel over the whole record.

    Parameters
    ----------
    recording : Recording
        Its pieces are continuous; nothing is assumed of the time between them.
    read : callable
        Returns the channel, linear in current, over flat samples start to stop.
    unit : str
    interval_second : float
    most_windows : int, optional
        Look at so many windows only, spread over the record: enough for a report, not for subtracting.

    Returns
    -------
    Pickup or None
        None where the rate is not known or too low, or the floor is seen too seldom to tell.
    """
    if not np.isfinite(interval_second) or interval_second <= 0 or 1 / interval_second < 5 * max(NOMINAL_HERTZ):
        return None
    harmonics = min(HARMONICS, int(0.4 / interval_second / max(NOMINAL_HERTZ)))
    windows = windows_of(recording.offsets, interval_second)
    if len(windows) == 0:
        return None
    if most_windows is not None:
        windows = windows[np.unique(np.linspace(0, len(windows) - 1, most_windows).astype(int))]
    band = floor_band(read, windows)
    frequency = _frequency(read, windows, band, interval_second, harmonics)
    if frequency is None:
        return None
    return _followed(recording, read, windows, band, (frequency, interval_second, harmonics), unit)


@dataclass(frozen=True)
class _Fit:
    """Fourier parts of one window, what they explain and what is left, over how many samples, and of which runs."""

    parts: Floats
    explained: float
    left: float
    samples: int
    kept: npt.NDArray[np.bool_]


def _fit(
    values: Floats,
    first: int,
    runs: Integers,
    cycles_a_sample: float,
    harmonics: int,
    kept: npt.NDArray[np.bool_] | None = None,
) -> _Fit | None:
    """Fit one window; runs that are left lively are dropped and the rest fitted again, unless ``kept`` is told."""
    from meseta.intake.calibration.kernels import pickup_sums

    count, size = len(runs), 2 * harmonics
    lengths = runs[:, 1] - runs[:, 0]
    matrix, vector, total = np.zeros((count, size, size)), np.zeros((count, size)), np.zeros(count)
    pickup_sums(values, first, cycles_a_sample, runs, harmonics, matrix, vector, total)
    chosen = np.ones(count, np.bool_) if kept is None else kept
    for _ in range(ROUNDS if kept is None else 1):
        whole, right = matrix[chosen].sum(axis=0), vector[chosen].sum(axis=0)
        if lengths[chosen].sum() * cycles_a_sample < 1.0 or np.linalg.cond(whole) > 1e6:
            return None
        parts = np.asarray(np.linalg.solve(whole, right), np.float64)
        left = np.maximum(total - 2 * vector @ parts + np.einsum("i,nij,j->n", parts, matrix, parts), 0.0)
        if kept is None:
            quiet = left / lengths <= LIVELY * np.median(left / lengths)
            if (quiet == chosen).all():
                break
            chosen = quiet
    return _Fit(parts, float(parts @ right), float(left[chosen].sum()), int(lengths[chosen].sum()), chosen)


def _thinned(values: Floats, by: int) -> Floats:
    return values[: len(values) // by * by].reshape(-1, by).mean(axis=1)


def _frequency(
    read: Read, windows: Integers, band: tuple[float, float], interval: float, harmonics: int
) -> float | None:
    """Return the frequency whose Fourier series explains most of the floor, refined by a parabola."""
    by = max(1, int(1.0 / interval / THINNED_HERTZ))
    chosen = probes_of(windows)
    period = 1.0 / min(NOMINAL_HERTZ) / interval / by
    probes = []
    for begin, end in chosen.tolist():
        values = read(begin, end)
        inside = (values >= band[0]) & (values <= band[1])
        thin = _thinned(np.where(inside, values, np.nan), by)
        runs = runs_within(thin, band, period)
        if len(runs):
            probes.append((np.nan_to_num(thin), runs, np.ones(len(runs), np.bool_)))

    def explained(hertz: float) -> float:
        fits = [_fit(values, 0, runs, hertz * interval * by, harmonics, kept) for values, runs, kept in probes]
        return sum(fit.explained for fit in fits if fit is not None)

    offsets = np.arange(-SEARCH_HERTZ, SEARCH_HERTZ + SEARCH_STEP_HERTZ / 2, SEARCH_STEP_HERTZ)
    found = [(explained(nominal + away), nominal + away) for nominal in NOMINAL_HERTZ for away in offsets.tolist()]
    if not found or max(found)[0] <= 0.0:
        return None
    near = max(found)[1]
    # once more round the best, without the runs that hold a decay or a step
    fits = [(one, _fit(one[0], 0, one[1], near * interval * by, harmonics)) for one in probes]
    probes = [(values, runs, fit.kept) for (values, runs, _), fit in fits if fit is not None]
    found = [(explained(near + step * SEARCH_STEP_HERTZ), near + step * SEARCH_STEP_HERTZ) for step in range(-3, 4)]
    best, near = max(found)
    before, after = explained(near - SEARCH_STEP_HERTZ), explained(near + SEARCH_STEP_HERTZ)
    bend = before - 2 * best + after
    shift = 0.5 * (before - after) / bend if bend < 0 else 0.0
    return float(near + SEARCH_STEP_HERTZ * np.clip(shift, -0.5, 0.5))


def _followed(
    recording: Recording,
    read: Read,
    windows: Integers,
    band: tuple[float, float],
    rate: tuple[float, float, int],
    unit: str,
) -> Pickup | None:
    """Fit every window at the common frequency; parts run linearly between the middles of windows of one piece."""
    frequency, interval, harmonics = rate
    period = 1.0 / min(NOMINAL_HERTZ) / interval
    middles, fits = [], []
    for begin, end in windows.tolist():
        values = read(begin, end)
        runs = runs_within(values, band, period)
        fit = _fit(np.nan_to_num(values), begin, runs, frequency * interval, harmonics) if len(runs) else None
        if fit is not None:
            middles.append((begin + end) // 2)
            fits.append(fit)
    if not fits:
        return None
    parts = np.array([fit.parts for fit in fits])
    sizes = np.hypot(parts[:, 0::2], parts[:, 1::2])
    used = sum(fit.samples for fit in fits)
    noise = np.sqrt(sum(fit.left for fit in fits) / used)
    white = float(noise * np.sqrt(2.0 / np.median([fit.samples for fit in fits])))
    error = max(white, _scatter(sizes[:, 0]))
    at, anchored = _anchored(recording.offsets, np.array(middles, np.int64), parts)
    return Pickup(
        frequency,
        np.median(sizes, axis=0),
        float(noise),
        error,
        unit,
        frequency * interval,
        at,
        anchored,
        used / recording.samples,
    )


def _scatter(sizes: Floats) -> float:
    """Return how far the amplitude of a window lies from that of the next, as a standard deviation of one of them.

    Decays and steps that are left in the floor move it by more than white noise.
    """
    steps = np.abs(np.diff(sizes))
    return MAD_TO_SIGMA * float(np.median(steps)) / np.sqrt(2.0) if len(steps) >= LEAST_STEPS else 0.0


def _anchored(offsets: Integers, middles: Integers, parts: Floats) -> tuple[Integers, Floats]:
    """Return anchors with the ends of every piece: the nearest parts hold there, and none in a piece without any."""
    at, rows = [], []
    piece_of = np.searchsorted(offsets, middles, side="right") - 1
    bounds = np.searchsorted(piece_of, np.arange(len(offsets)))
    none = np.zeros(parts.shape[1])
    for piece in range(len(offsets) - 1):
        if offsets[piece + 1] == offsets[piece]:
            continue
        own = slice(bounds[piece], bounds[piece + 1])
        held = parts[own]
        at += [offsets[piece], *middles[own].tolist(), offsets[piece + 1] - 1]
        rows += [held[0] if len(held) else none, *held, held[-1] if len(held) else none]
    return np.array(at, np.int64), np.array(rows)
