"""The standard workload of the benchmarks."""

from __future__ import annotations

import hashlib

import numpy as np

from meseta.simulate.generate import simulate
from meseta.simulate.settings import SimulationSettings
from meseta.traces import Channel, Drive, PhaseTable, Source, TraceSet, trace_table
from meseta.work import Work

__all__ = ["standard_workload"]

_OPEN_SHARE = 0.6
_SHARES = {"metal": 0.4, "molecule": 0.4, "tunnelling": 0.2}
_MEAN_NM = {"metal": 1.19, "molecule": 1.64, "tunnelling": 0.585}
"""Mean displacement above the floor of each kind; what is left of a trace is floor."""


def standard_workload(traces: int = 10_000, samples: int = 5_000, seed: int = 0, work: Work | None = None) -> TraceSet:
    """Return the workload on which speed is measured.

    40 % metal staircases, 40 % molecular traces (every one with a molecule), 20 % tunnelling only, mixed; the
    stretching speed is chosen so that 60 % of all samples lie at the floor.

    Parameters
    ----------
    traces, samples : int
    seed : int
    work : Work, optional
    """
    mean_nm = sum(share * _MEAN_NM[kind] for kind, share in _SHARES.items())
    step_nm = mean_nm / ((1 - _OPEN_SHARE) * samples)
    settings = SimulationSettings(samples=samples, nm_per_second=step_nm * 20_000.0, yield_share=1.0)
    metal = round(traces * _SHARES["metal"])
    counts = {"metal": metal, "molecule": metal, "tunnelling": traces - 2 * metal}
    order = np.random.Generator(np.random.PCG64(seed)).permutation(traces)
    values = np.empty((traces, samples), np.float32)
    kinds = np.empty(traces, "U10")
    first = 0
    for kind, count in counts.items():
        if count:
            rows = order[first : first + count]
            values[rows] = simulate(kind, count, seed, settings, work).traces.conductance.reshape(count, samples)
            kinds[rows] = kind
            first += count
    digest = hashlib.sha256(values.data).hexdigest()
    offsets = np.arange(traces + 1, dtype=np.int64) * samples
    table = trace_table(
        traces,
        record_start=2 * offsets[:-1],
        sample_interval_second=1 / settings.sampling_hertz,
        bias_volt=settings.bias_volt,
        kind=kinds,
    )
    return TraceSet(
        offsets=offsets,
        channels={"conductance": Channel.of(values.reshape(-1), "G0")},
        drive=Drive(np.zeros(traces), np.full(traces, settings.nm_per_sample), "nm"),
        phases=PhaseTable.whole(np.diff(offsets), table["direction"]),
        table=table,
        sources=(Source(digest, f"standard workload, seed {seed}", int(values.nbytes), "simulation", "in memory"),),
        key=digest,
    )
