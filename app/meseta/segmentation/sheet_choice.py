"""Which traces a contact sheet shows: at random, of one group, or those whose plateaus are most in doubt."""

from __future__ import annotations

from typing import Literal

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError, nearest
from meseta.segmentation.results import PlateauTable

__all__ = ["choose_traces"]


def choose_traces(
    plateaus: PlateauTable,
    traces: int,
    count: int,
    by: Literal["random", "group", "doubt"] = "random",
    *,
    group: npt.NDArray[np.str_] | None = None,
    name: str = "",
    seed: int = 0,
) -> npt.NDArray[np.int64]:
    """Choose the traces of a contact sheet.

    Parameters
    ----------
    plateaus : PlateauTable
        Of all traces.
    traces : int
        Number of traces.
    count : int
        Most traces to choose.
    by : {"random", "group", "doubt"}
        "group": at random within group ``name``; "doubt": least certain first (lowest score of any of their plateaus,
        then switching plateaus).
    group : (traces,) str, optional
        Names of each trace's groups, joined by ";".
    seed : int

    Returns
    -------
    (n,) int64
        Rows of the traces: in order of the record, or most doubtful first.
    """
    rng = np.random.Generator(np.random.PCG64(seed))
    rows = np.arange(traces, dtype=np.int64)
    if by == "doubt":
        doubt = np.zeros(traces)
        scores = np.nan_to_num(plateaus.score, nan=1.0)
        np.maximum.at(doubt, plateaus.trace, 1.0 - scores + 0.25 * plateaus.telegraph)
        order = np.lexsort((rng.permutation(traces), -doubt))
        return rows[order[:count]]
    if by == "group":
        names = np.full(traces, "") if group is None else group
        rows = np.array([row for row in rows if name in str(names[row]).split(";")], np.int64)
        if not len(rows):
            known = sorted({part for text in names for part in str(text).split(";") if part})
            raise CallError(f"no trace is in group '{name}'", "sheet", nearest(name, known))
    return np.sort(rng.permutation(rows)[:count])
