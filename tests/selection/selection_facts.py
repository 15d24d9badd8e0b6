"""A small set of traces with hand-made measures and plateaus, for the tests of rules."""

from dataclasses import fields

import numpy as np

from meseta.segmentation import PlateauTable, TraceMeasures
from meseta.traces import TraceSet

TRACES = 8


def some_traces(**columns):
    rng = np.random.default_rng(3)
    given = {
        "direction": ["opening"] * 7 + ["closing"],
        "molecule": ["amine", "thiol", "amine", "", "thiol", "amine", "thiol", "amine"],
        "salt": np.array([1, 2, 3, 4, 5, 6, 7, 8]),
        "good": np.array([True, True, False, True, True, False, True, True]),
        "time_second": np.array([0.0, 10, 20, np.nan, 40, 50, 60, 70]),
    }
    return TraceSet.from_arrays(rng.random((TRACES, 20)), step_nm=0.01, **(given | columns))


def some_measures(**columns):
    given = {field.name: np.arange(TRACES, dtype=float) for field in fields(TraceMeasures)}
    given |= {
        "rupture_found": np.array([1, 1, 1, 0, 1, 1, 0, 1], bool),
        "reaches_floor": np.ones(TRACES, bool),
        "reforms": np.zeros(TRACES, bool),
        "highest_g0": np.array([0.5, 0.9, np.nan, 2.0, 3.0, 0.1, 7.0, 8.0]),
    }
    return TraceMeasures(**(given | columns))


def some_plateaus():
    table = PlateauTable.empty()
    rows = {
        "trace": [0, 0, 1, 4, 4, 4, 5],
        "number": [2, 1, 1, 3, 2, 1, 1],
        "level_g0": [1.0, 1e-4, 1e-4, 1.0, 2e-4, 1e-3, 1e-5],
        "length_drive": [0.3, 0.5, 0.1, 0.2, 0.4, 0.6, 0.7],
        "length_nm": [0.3, 0.5, 0.1, 0.2, 0.4, 0.6, 0.7],
        "aligned": [True] * 7,
        "displacement_start_nm": [-0.3, 0.0, 0.0, -0.2, 0.2, 0.4, 0.0],
        "displacement_stop_nm": [0.0, 0.2, 0.1, 0.0, 0.4, 0.6, 0.1],
        "kind": ["metal", "molecule", "molecule", "metal", "molecule", "molecule", "molecule"],
    }
    count = len(rows["trace"])
    columns = {name: np.zeros(count, column.dtype) for name, column in table.columns().items()}
    return PlateauTable(**(columns | {name: np.array(values) for name, values in rows.items()}))
