"""Simulated openings as a TraceSet, with their truth."""

from __future__ import annotations

import dataclasses
import hashlib
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.simulate import kernels
from meseta.simulate.junctions import Junctions, Kind, kind_of, populations
from meseta.simulate.pieces import METAL, NOTHING, Pieces, opening_pieces
from meseta.simulate.readings import Readings, amplifier_of, read_pieces
from meseta.simulate.record import Draw, record_of
from meseta.simulate.results import LABELS, Simulation, TruthTable
from meseta.simulate.settings import SimulationSettings
from meseta.simulate.streams import key_of, stream, traces_a_block
from meseta.traces import Channel, Drive, PhaseTable, Source, TraceSet, trace_table
from meseta.work import Work

__all__ = ["bridge_labels", "parameters_of", "simulate", "truth_rows"]

Floats32 = npt.NDArray[np.float32]
_SHORTEST_TRUE = 3


def simulate(
    kind: str,
    traces: int,
    seed: int,
    settings: SimulationSettings | None = None,
    work: Work | None = None,
) -> Simulation:
    """Simulate openings of one kind with exact truth.

    Parameters
    ----------
    kind : str
        A name in :data:`~meseta.simulate.junctions.KINDS`: metal, molecule, mixture, blank, tunnelling.
    traces : int
        Number of openings.
    seed : int
        From 0; the same seed gives the same bits whatever the threads and blocks, and a longer record begins with the
        shorter one (without drift and specimens, which are spread over the record).
    settings : SimulationSettings, optional
    work : Work, optional

    Returns
    -------
    Simulation
        Conductance in G0 as the calibrated set-up would show it: with noise, filter and converter steps, and through
        the series resistor if there is one (``truth.level_g0`` is the junction's own).

    Raises
    ------
    CallError
        Where the kind is unknown or a number out of range.

    Notes
    -----
    The physics and its sources are stated in :mod:`meseta.simulate.junctions` and :mod:`meseta.simulate.readings`.
    """
    chosen, settings, work = kind_of(kind), settings or SimulationSettings(), work or Work()
    if traces < 1:
        raise CallError(f"{traces} traces cannot be simulated", "traces", "give at least 1")
    key, size = key_of(seed, kind), traces_a_block(settings.samples)
    blocks = -(-traces // size)
    record = record_of(settings, traces, blocks * size, key)
    values = np.empty((traces, settings.samples), np.float32)

    def one(block: int) -> tuple[TruthTable, npt.NDArray[np.str_]]:
        first, last = block * size, min((block + 1) * size, traces)
        draw = Draw(stream(key, "junction", block), settings, record.block(first, first + size))
        junctions = chosen.draw(draw)
        pieces = opening_pieces(junctions, settings)
        places = (first + np.arange(size, dtype=np.int64)) * 2 * settings.samples
        shown = read_pieces(pieces, settings, key, block, places, settings.samples)
        used = last - first
        _quantise(shown.shown[:used], settings, values[first:last])
        return truth_rows(pieces, shown, settings, used, first), bridge_labels(junctions, chosen)[:used]

    counts = [min(size, traces - block * size) for block in range(blocks)]
    parts = list(work.each(one, list(range(blocks)), "simulating", sizes=counts))
    truth = TruthTable.concatenate([table for table, _ in parts])
    labels = np.concatenate([names for _, names in parts])
    parameters = parameters_of(kind, traces, seed, settings) | {"layout": "traces"}
    return Simulation(_trace_set(values, record.specimen[:traces], parameters, settings), truth, labels, parameters)


def _quantise(shown: npt.NDArray[np.float64], settings: SimulationSettings, out: Floats32) -> None:
    """Write readings in G0 in the steps of the converter."""
    volts_a_step = 2 * settings.full_scale_volt / 2**settings.converter_bits
    if settings.amplifier == "logarithmic":
        kernels.quantise_logarithmic(
            shown, volts_a_step / settings.volt_per_decade, float(np.log10(settings.full_scale_g0)), out
        )
        return
    coarse = volts_a_step / settings.gain_volt_per_ampere / settings.ampere_per_g0
    given = settings.converter_step_g0
    fine = 0.4 * settings.levels.floor_sigma_g0 if given is None else given
    kernels.quantise_linear(shown, fine, max(coarse, fine) if fine > 0 else 0.0, 0.01, settings.full_scale_g0, out)


def truth_rows(
    pieces: Pieces, readings: Readings, settings: SimulationSettings, traces: int, first_trace: int
) -> TruthTable:
    """Return the plateaus of the first ``traces`` traces of a block that the set-up can show."""
    start, stop, level = readings.start[:traces], readings.stop[:traces], readings.level_g0[:traces]
    kind = pieces.kind[:traces]
    rho = amplifier_of(settings).rho
    shown = level / (1 + rho * level)
    real = (kind != NOTHING) & (stop - start >= _SHORTEST_TRUE) & (shown < 0.98 * settings.full_scale_g0)
    return TruthTable(
        trace=np.nonzero(real)[0].astype(np.int64) + first_trace,
        start=start[real],
        stop=stop[real],
        kind=np.where(kind[real] == METAL, "metal", "molecule"),
        level_g0=level[real],
        slope_decades_per_nm=pieces.slope[:traces][real] / settings.nm_per_sample,
        label=np.array(LABELS)[pieces.label[:traces][real]],
    )


def bridge_labels(junctions: Junctions, kind: Kind) -> npt.NDArray[np.str_]:
    """Return what bridged the gap of each trace."""
    names = np.array(["molecule", *LABELS[1:]])[junctions.bridge.label] if kind.bridges else np.array("none")
    return np.where(junctions.bridge.length_nm > 0, names, "none")


def parameters_of(kind: str, traces: int, seed: int, settings: SimulationSettings) -> dict[str, Any]:
    """Return everything a simulation was made with, in plain values."""
    amplifier = amplifier_of(settings)
    return {
        "kind": kind,
        "title": kind_of(kind).title,
        "traces": traces,
        "seed": seed,
        "nm_per_sample": settings.nm_per_sample,
        "rise_samples": amplifier.rise_samples,
        "full_scale_g0": settings.full_scale_g0,
        "noise_levels": dataclasses.asdict(settings.levels),
        "peaks": populations(kind_of(kind), settings),
        "settings": dataclasses.asdict(settings),
    }


def _trace_set(
    values: Floats32,
    specimen: npt.NDArray[np.int64],
    parameters: dict[str, Any],
    settings: SimulationSettings,
) -> TraceSet:
    traces, samples = values.shape
    digest = hashlib.sha256(values.data).hexdigest()
    offsets = np.arange(traces + 1, dtype=np.int64) * samples
    table = trace_table(
        traces,
        record_start=2 * offsets[:-1],
        specimen=np.char.add("specimen ", (specimen + 1).astype(np.str_)) if settings.specimens > 1 else "",
        time_second=2 * offsets[:-1] / settings.sampling_hertz,
        sample_interval_second=1 / settings.sampling_hertz,
        bias_volt=settings.bias_volt,
    )
    name = f"simulated {parameters['kind']}, seed {parameters['seed']}"
    return TraceSet(
        offsets=offsets,
        channels={"conductance": Channel.of(values.reshape(-1), "G0")},
        drive=Drive(np.zeros(traces), np.full(traces, settings.nm_per_sample), "nm"),
        phases=PhaseTable.whole(np.diff(offsets), table["direction"]),
        table=table,
        sources=(Source(digest, name, int(values.nbytes), "simulation", "conductance in G0 in memory"),),
        key=digest,
    )
