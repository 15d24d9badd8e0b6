"""Physically motivated traces with exact truth, for demonstrations, tests and injection."""

from meseta.simulate.generate import simulate
from meseta.simulate.junctions import KINDS
from meseta.simulate.results import RawChannel, RawSimulation, RawTruthTable, Simulation, TruthTable
from meseta.simulate.settings import NOISE_PRESETS, SimulationSettings

__all__ = [
    "KINDS",
    "NOISE_PRESETS",
    "RawChannel",
    "RawSimulation",
    "RawTruthTable",
    "Simulation",
    "SimulationSettings",
    "TruthTable",
    "simulate",
]
