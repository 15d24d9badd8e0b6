"""One continuous recording of piezo and amplifier volts: pull, hold, push, hold, over and over."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.simulate.generate import bridge_labels, parameters_of, truth_rows
from meseta.simulate.junctions import Junctions, kind_of
from meseta.simulate.pieces import METAL, NOTHING, Pieces, opening_pieces
from meseta.simulate.readings import read_pieces
from meseta.simulate.record import Draw, Record, record_of
from meseta.simulate.results import RawSimulation, RawTruthTable, RecordedVolts
from meseta.simulate.settings import SimulationSettings
from meseta.simulate.streams import key_of, stream, traces_a_block
from meseta.work import Work

__all__ = ["Cycle", "cycle_of", "simulate_raw"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Codes = npt.NDArray[np.int16] | npt.NDArray[np.int32]

_THICK: Final = 12
"""Contacts thicker than the staircase, each way."""
_CLOSED_G0: Final = 30.0
_PIEZO_START_VOLT: Final = 1.0
_PIEZO_NOISE_VOLT: Final = 3e-4


@dataclass(frozen=True)
class Cycle:
    """Samples of one cycle: hold closed, pull, hold open, push."""

    hold: int
    pull: int
    push: int

    @property
    def samples(self) -> int:
        """Samples of the whole cycle."""
        return 2 * self.hold + self.pull + self.push


def cycle_of(settings: SimulationSettings) -> Cycle:
    """Return the cycle of the settings."""
    return Cycle(settings.hold_samples, settings.samples, int(np.ceil(settings.samples / settings.push_speedup)))


def simulate_raw(
    kind: str,
    traces: int,
    seed: int,
    settings: SimulationSettings | None = None,
    work: Work | None = None,
) -> RawSimulation:
    """Simulate one continuous recording as the acquisition stores it, with exact truth.

    The amplifier is linear or logarithmic, with bias, offset and series resistor; readings are integers of a converter
    that clips at full scale.  A second, more sensitive linear channel is recorded where
    ``settings.high_gain_volt_per_ampere`` is given.

    Parameters
    ----------
    kind, traces, seed, settings, work
        As for :func:`~meseta.simulate.generate.simulate`; ``traces`` counts the openings.

    Raises
    ------
    CallError
        Where the kind is unknown, a number out of range, or the pull too short to break the contact.
    """
    chosen, settings, work = kind_of(kind), settings or SimulationSettings(), work or Work()
    if traces < 1:
        raise CallError(f"{traces} traces cannot be simulated", "traces", "give at least 1")
    _check_pull(settings)
    cycle, key = cycle_of(settings), key_of(seed, kind + " raw")
    size = traces_a_block(cycle.samples)
    blocks = -(-traces // size)
    record = record_of(settings, traces, blocks * size, key)

    def one(block: int) -> tuple[list[Codes], RawTruthTable, npt.NDArray[np.str_]]:
        first, used = block * size, min(size, traces - block * size)
        part = record.block(first, first + size)
        junctions = chosen.draw(Draw(stream(key, "junction", block), settings, part))
        pieces = _cycle_pieces(junctions, settings, cycle, part, stream(key, "closing", block))
        places = (first + np.arange(size, dtype=np.int64)) * cycle.samples
        shown = read_pieces(pieces, settings, key, block, places, cycle.samples)
        volts = [_piezo(settings, cycle, key, block, size)[:used], *_amplifiers(shown.shown[:used], settings)]
        table = truth_rows(pieces, shown, settings, used, first)
        begin = table.trace * cycle.samples + cycle.hold
        truth = RawTruthTable(
            **(table.columns() | {"start": table.start - cycle.hold, "stop": table.stop - cycle.hold}),
            record_start=begin,
            raw_start=begin - cycle.hold + table.start,
            raw_stop=begin - cycle.hold + table.stop,
        )
        return [channel.reshape(-1) for channel in volts], truth, bridge_labels(junctions, chosen)[:used]

    counts = [min(size, traces - block * size) for block in range(blocks)]
    parts = list(work.each(one, list(range(blocks)), "simulating", sizes=counts))
    codes = [np.concatenate([part[0][place] for part in parts]) for place in range(len(parts[0][0]))]
    begin = np.arange(traces, dtype=np.int64) * cycle.samples + cycle.hold
    parameters = parameters_of(kind, traces, seed, settings) | {
        "layout": "continuous",
        "cycle_samples": cycle.samples,
        "hold_samples": cycle.hold,
        "push_samples": cycle.push,
    }
    return RawSimulation(
        channels=_channels(codes, settings),
        opening_start=begin,
        opening_stop=begin + cycle.pull,
        truth=RawTruthTable.concatenate([part[1] for part in parts]),
        labels=np.concatenate([part[2] for part in parts]),
        parameters=parameters,
    )


def _check_pull(settings: SimulationSettings) -> None:
    span = settings.samples * settings.nm_per_sample
    needed = settings.rupture_nm + 1.5
    if span < needed:
        raise CallError(
            f"a pull of {span:g} nm is too short to break the contact",
            "samples",
            f"give samples, speed and sampling rate for at least {needed:g} nm",
        )


# -- pieces of a cycle ----------------------------------------------------------------------------------------------


def _cycle_pieces(
    junctions: Junctions, settings: SimulationSettings, cycle: Cycle, record: Record, rng: np.random.Generator
) -> Pieces:
    """Return the pieces of a whole cycle: closed and thinning contact, the opening proper, the way back."""
    opening = opening_pieces(junctions, settings)
    contacts = junctions.staircase.level_g0.shape[1]
    before = _rupture_samples(opening.stop[:, contacts - 1], settings, record, rng)
    thickest = np.maximum(junctions.staircase.level_g0[:, 0], 10 ** (-junctions.decades_per_nm * junctions.gap_nm))
    thick = _thinning(thickest, before, cycle, settings, rng)
    moved = np.minimum(opening.stop[:, :-1] + (cycle.hold + before)[:, None], cycle.hold + cycle.pull)
    bridge_stop = moved[:, -1]
    pull = _replaced(_first_columns(opening, contacts + 1), moved)
    back = _way_back(junctions, pull, opening, bridge_stop, before, cycle, settings, rng)
    return _joined([thick, pull, back])


def _rupture_samples(
    staircase: Integers, settings: SimulationSettings, record: Record, rng: np.random.Generator
) -> Integers:
    """Return how many samples of the pull pass before the staircase begins.

    The place of the rupture wanders from cycle to cycle, partly remembered with the junction.
    """
    place = settings.rupture_nm + 0.15 * rng.standard_normal(len(staircase)) + 0.1 * record.level_memory
    room = np.maximum(np.rint(place / settings.nm_per_sample).astype(np.int64) - staircase, 0)
    latest = settings.samples - staircase - int(1.0 / settings.nm_per_sample)
    least = np.int64(0.1 / settings.nm_per_sample)
    chosen: Integers = np.maximum(np.minimum(np.maximum(room, least), latest), 0)
    return chosen


def _thinning(
    top_g0: Floats, before: Integers, cycle: Cycle, settings: SimulationSettings, rng: np.random.Generator
) -> Pieces:
    """Return the contact from closed down to the staircase: plateaus too, in steps of about a tenth."""
    traces = len(before)
    shares = rng.dirichlet(np.full(_THICK, 2.0), traces)
    stop = cycle.hold + np.rint(np.cumsum(shares, axis=1) * before[:, None]).astype(np.int64)
    fall = -np.sort(-rng.random((traces, _THICK)), axis=1)
    top = np.log10(top_g0)[:, None]
    level = top + np.maximum(np.log10(_CLOSED_G0) - top, 0.3) * fall + 0.02
    first = _constant(np.full((traces, 1), cycle.hold), level[:, :1], settings, NOTHING)
    return _joined([first, _constant(stop, level, settings, METAL)])


def _way_back(
    junctions: Junctions,
    pull: Pieces,
    opening: Pieces,
    bridge_stop: Integers,
    before: Integers,
    cycle: Cycle,
    settings: SimulationSettings,
    rng: np.random.Generator,
) -> Pieces:
    """Return the rest of the pull, the hold, the approach through the gap, and the growing contact."""
    traces, slope = len(before), -junctions.decades_per_nm * settings.nm_per_sample
    end_pull, end_hold = cycle.hold + cycle.pull, cycle.hold + cycle.pull + cycle.hold
    begin = pull.tunnel_log10_g0[:, -1] + slope * (bridge_stop - pull.stop[:, -2])
    widest = begin + slope * (end_pull - bridge_stop)
    held = bridge_stop >= end_pull
    kept = np.where(held, pull.log10_g0[:, -1] + pull.slope[:, -1] * (bridge_stop - pull.stop[:, -2]), -np.inf)
    faster = settings.push_speedup
    touch_nm = np.maximum(0.15 + 0.05 * rng.standard_normal(traces), 0.02)
    touch = end_hold + np.rint((-widest - junctions.decades_per_nm * touch_nm) / (-slope * faster)).astype(np.int64)
    touch = np.clip(touch, end_hold + 1, cycle.samples - 1)
    stop = np.stack([np.full(traces, end_pull), np.full(traces, end_hold), touch], axis=1)
    gap = np.stack([begin, widest, widest], axis=1)
    gap_slope = np.stack([slope, np.zeros(traces), -slope * faster], axis=1)
    own = np.stack([np.full(traces, -np.inf), kept, np.full(traces, -np.inf)], axis=1)
    shape = (traces, 3)
    open_ = Pieces(
        stop,
        own,
        np.zeros(shape),
        gap,
        gap_slope,
        np.full(shape, settings.levels.tunnelling_noise),
        np.zeros(shape, np.uint8),
        np.zeros(shape, np.uint8),
    )
    return _joined([open_, _growing(touch, cycle, settings, rng)])


def _growing(touch: Integers, cycle: Cycle, settings: SimulationSettings, rng: np.random.Generator) -> Pieces:
    """Return the contact that is pressed together: from one atom to closed."""
    traces = len(touch)
    lengths = rng.gamma(3.0, 0.09 / 3.0, (traces, _THICK - 1)) / (settings.nm_per_sample * settings.push_speedup)
    stop = touch[:, None] + np.rint(np.cumsum(np.maximum(lengths, 1), axis=1)).astype(np.int64)
    stop = np.minimum(np.concatenate([stop, np.full((traces, 1), cycle.samples)], axis=1), cycle.samples)
    atoms = np.array([1, 2, 3, 4, 5, 6, 8, 10, 13, 17, 22, _CLOSED_G0])
    level = np.log10(atoms) + 0.02 * rng.standard_normal((traces, _THICK))
    return _constant(stop, level, settings, NOTHING)


def _constant(stop: Integers, log10_g0: Floats, settings: SimulationSettings, kind: int) -> Pieces:
    shape = stop.shape
    return Pieces(
        stop.astype(np.int64),
        np.ascontiguousarray(log10_g0),
        np.zeros(shape),
        np.full(shape, -np.inf),
        np.zeros(shape),
        np.full(shape, settings.levels.relative_noise),
        np.full(shape, kind, np.uint8),
        np.zeros(shape, np.uint8),
    )


def _first_columns(pieces: Pieces, columns: int) -> Pieces:
    return Pieces(**{name: value[:, :columns] for name, value in vars(pieces).items()})


def _replaced(pieces: Pieces, stop: Integers) -> Pieces:
    return Pieces(**(vars(pieces) | {"stop": stop}))


def _joined(parts: list[Pieces]) -> Pieces:
    return Pieces(
        **{
            name: np.ascontiguousarray(np.concatenate([getattr(part, name) for part in parts], axis=1))
            for name in vars(parts[0])
        }
    )


# -- volts and converter ----------------------------------------------------------------------------------------------


def _piezo(settings: SimulationSettings, cycle: Cycle, key: int, block: int, traces: int) -> Codes:
    """Return the piezo's codes, (traces, cycle)."""
    reach = cycle.pull * settings.nm_per_sample / settings.nm_per_volt
    ramp = np.concatenate(
        [
            np.zeros(cycle.hold),
            np.arange(cycle.pull) * (reach / cycle.pull),
            np.full(cycle.hold, reach),
            reach * (1 - np.arange(cycle.push) / cycle.push),
        ]
    )
    ramp = ramp + _PIEZO_START_VOLT if settings.pull_is == "rising" else _PIEZO_START_VOLT + reach - ramp
    noise = stream(key, "piezo", block).standard_normal((traces, cycle.samples)) * _PIEZO_NOISE_VOLT
    return _converted(ramp + noise, _piezo_step(settings), 16)


def _piezo_step(settings: SimulationSettings) -> float:
    """Return the step of a 16-bit converter for the piezo: +-10 V, or as many times as the ramp needs."""
    reach = settings.samples * settings.nm_per_sample / settings.nm_per_volt + _PIEZO_START_VOLT
    return float(20.0 * np.ceil((reach + 0.5) / 10.0) / 2**16)


def _amplifiers(shown: Floats, settings: SimulationSettings) -> list[Codes]:
    """Return the codes of the amplifier, and of the second one where it is recorded."""
    step, bits = _amplifier_step(settings), settings.converter_bits
    if settings.amplifier == "logarithmic":
        decades = shown + np.log10(settings.ampere_per_g0 / settings.reference_ampere)
        return [_converted(settings.volt_per_decade * decades + settings.offset_volt, step, bits)]
    ampere = shown * settings.ampere_per_g0
    gains = [settings.gain_volt_per_ampere]
    if settings.high_gain_volt_per_ampere is not None:
        gains.append(settings.high_gain_volt_per_ampere)
    return [_converted(ampere * gain + settings.offset_volt, step, bits) for gain in gains]


def _amplifier_step(settings: SimulationSettings) -> float:
    return 2.0 * settings.full_scale_volt / 2**settings.converter_bits


def _converted(volts: Floats, step: float, bits: int) -> Codes:
    """Return the nearest converter codes, clipped at full scale."""
    half = 2 ** (bits - 1)
    codes = np.clip(np.rint(volts / step), -half, half - 1)
    return codes.astype(np.int16) if bits <= 16 else codes.astype(np.int32)


def _channels(codes: list[Codes], settings: SimulationSettings) -> tuple[RecordedVolts, ...]:
    names = ["piezo", "amplifier", "amplifier_high_gain"]
    steps = [_piezo_step(settings), _amplifier_step(settings), _amplifier_step(settings)]
    return tuple(
        RecordedVolts(name, name, values, step, 0.0)
        for name, values, step in zip(names[: len(codes)], codes, steps[: len(codes)], strict=True)
    )
