"""Physically motivated traces with exact truth, for demonstrations, tests and injection."""

from meseta.simulate.generate import simulate
from meseta.simulate.junctions import KINDS
from meseta.simulate.raw import simulate_raw
from meseta.simulate.results import RawSimulation, RawTruthTable, RecordedVolts, Simulation, TruthTable
from meseta.simulate.settings import NOISE_PRESETS, SimulationSettings
from meseta.simulate.workload import standard_workload
from meseta.simulate.write import LAYOUTS, WrittenSimulation, write_simulation

__all__ = [
    "KINDS",
    "LAYOUTS",
    "NOISE_PRESETS",
    "RawSimulation",
    "RawTruthTable",
    "RecordedVolts",
    "Simulation",
    "SimulationSettings",
    "TruthTable",
    "WrittenSimulation",
    "simulate",
    "simulate_raw",
    "standard_workload",
    "write_simulation",
]
