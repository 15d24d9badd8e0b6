"""Recordings with a planted share of molecules, analysed from the samples on: how often is the share returned?

The recordings come from ``meseta simulate`` with hard noise, molecules four sigma above the floor and often short.  The
efficiency with which they are found is measured on other recordings.  A few traces of every recording, the blank too,
hold a contaminant that looks like the molecule: the false plateaus.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meseta.analysis import Analysis, yield_in_window
from meseta.histograms import Yield, hits_in_window
from meseta.recipe import Recipe
from meseta.simulate import SimulationSettings, simulate
from meseta.work import Work

WINDOW = (10**-5.2, 10**-4.0)
SAMPLES = 2000
CONTAMINATED = 0.03
SHARES = (0.5, 0.2, 0.05, 0.0)
RECIPE = Recipe().with_values("resampling", replicates=20)


def settings(share: float) -> SimulationSettings:
    """Return a simulation of short records, 2 nm at 10 nm/s."""
    return SimulationSettings(
        samples=SAMPLES,
        sampling_hertz=10_000.0,
        nm_per_second=10.0,
        yield_share=share,
        noise="hard",
        molecule_log10_g0=-4.6,
        molecule_length_nm=0.2,
        molecule_length_spread_nm=0.12,
    )


def recording(kind: str, share: float, traces: int, seed: int, work: Work) -> Analysis:
    return Analysis(simulate(kind, traces, seed, settings(share), work).traces, RECIPE)


@dataclass(frozen=True)
class Efficiency:
    """Share of traces with a molecule whose plateau is found in the window, and its standard error."""

    share: float
    error: float


def efficiency(traces: int, seed: int, work: Work) -> Efficiency:
    """Measure the efficiency on a recording of which half the traces have a molecule.

    What the finder learns of a recording (its noise, say) depends a little on how many molecules are in it: where every
    trace has one, some 5 % fewer of them are found.
    """
    simulation = simulate("molecule", traces, seed, settings(0.5), work)
    mine = simulation.labels != "none"
    hit = hits_in_window(Analysis(simulation.traces, RECIPE).plateaus(work), traces, WINDOW)
    share = float(hit[mine].mean())
    return Efficiency(share, float(np.sqrt(share * (1 - share) / mine.sum())))


def experiment(share: float, traces: int, seed: int, known: Efficiency, work: Work) -> Yield:
    """Return the yield of one recording of ``traces`` traces, against a blank of as many."""
    bridged = 1 - (1 - share) * (1 - CONTAMINATED)
    molecule = recording("molecule", bridged, traces, seed, work)
    blank = recording("molecule", CONTAMINATED, traces, seed + 500_000, work)
    return yield_in_window(molecule, WINDOW, blank, known.share, known.error, work)
