"""What a result holds, as plain arrays with units, for files and other tools.

Three forms: :func:`content_of` (arrays by name, each with its unit, and attributes), :func:`columns_of` (one row a bin,
for CSV) and :func:`uhi_of` (the histogram serialisation of the Scikit-HEP tools, UHI schema 1: a plain dictionary that
``boost_histogram.serialization.from_uhi`` and others read).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import singledispatch
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.histograms.comparison import Comparison, Difference
from meseta.histograms.lengths import LengthHistogram
from meseta.histograms.results import (
    ConductanceHistogram,
    CorrelationHistogram,
    DisplacementHistogram,
    Grid,
)
from meseta.histograms.shifted import ShiftedCorrelation
from meseta.histograms.temporal import TemporalHistogram

__all__ = ["Content", "Quantity", "columns_of", "content_of", "uhi_of"]

Array = npt.NDArray[Any]


@dataclass(frozen=True)
class Quantity:
    """An array, its unit ("" where it has none), and the names of the axes along it."""

    values: Array
    unit: str = ""
    along: tuple[str, ...] = ()


@dataclass(frozen=True)
class Content:
    """A result as plain values.

    Attributes
    ----------
    kind : str
        What it is ("conductance histogram").
    quantities : mapping of str to Quantity
        Bin edges are named ``<axis>_edges``.
    attributes : mapping of str to str, number or truth
        Normalisation, traces, scheme of the bands ...
    """

    kind: str
    quantities: Mapping[str, Quantity]
    attributes: Mapping[str, Any] = field(default_factory=dict)

    def arrays(self) -> dict[str, Array]:
        """Return the arrays by name."""
        return {name: quantity.values for name, quantity in self.quantities.items()}


def _edges(grid: Grid) -> Quantity:
    return Quantity(grid.edges_g0, "G0")


@singledispatch
def content_of(result: Any) -> Content:
    """Return the content of a histogram, a comparison, a difference or a correlation.

    Raises
    ------
    CallError
        For anything else.
    """
    raise CallError(
        f"a {type(result).__name__} has no plain arrays to write", "result", "take a histogram, map or comparison"
    )


@content_of.register
def _conductance(result: ConductanceHistogram) -> Content:
    one = ("conductance",)
    return Content(
        "conductance histogram",
        {
            "conductance_edges": _edges(result.grid),
            "counts": Quantity(result.counts, "samples", one),
            "density": Quantity(result.density, result.density_unit, one),
            "density_low": Quantity(result.density_low, result.density_unit, one),
            "density_high": Quantity(result.density_high, result.density_unit, one),
            "traces_in_bin": Quantity(result.traces_in_bin, "traces", one),
        },
        {
            "axis": result.grid.axis,
            "normalisation": result.density_unit,
            "traces": result.traces,
            "band": f"pointwise, 95 %, from {result.scheme}" if result.scheme else "none",
            "weak_traces": result.weak_traces,
            **{f"excluded_{name}": number for name, number in result.excluded.items()},
        },
    )


@content_of.register
def _displacement(result: DisplacementHistogram) -> Content:
    plane, ridge = ("displacement", "conductance"), result.ridge()
    return Content(
        "2D conductance-displacement histogram",
        {
            "displacement_edges": Quantity(result.drive_edges, result.drive_unit),
            "conductance_edges": _edges(result.grid),
            "counts": Quantity(result.counts, "samples", plane),
            "density": Quantity(result.density, result.density_unit, plane),
            "ridge": Quantity(ridge.median_g0, "G0", plane[:1]),
            "ridge_low": Quantity(ridge.low_g0, "G0", plane[:1]),
            "ridge_high": Quantity(ridge.high_g0, "G0", plane[:1]),
        },
        {
            "axis": result.grid.axis,
            "normalisation": result.density_unit,
            "traces": result.traces,
            "not_aligned": result.not_aligned,
            "ridge": "median of each column, with the middle 68.27 %",
        },
    )


@content_of.register
def _correlation(result: CorrelationHistogram) -> Content:
    second, pair = result.weak_second if len(result.weak_second) else result.weak, ("conductance", "conductance")
    band = {"correlation_low": result.correlation_low, "correlation_high": result.correlation_high}
    return Content(
        "2D correlation histogram",
        {
            "conductance_edges": _edges(result.grid),
            "correlation": Quantity(result.correlation, "", pair),
            **{name: Quantity(values, "", pair) for name, values in band.items() if values.size},
            "significant": Quantity(result.significant, "", pair),
            "weak": Quantity(result.weak, "", ("conductance",)),
            "weak_second": Quantity(second, "", ("conductance",)),
        },
        {
            "axis": result.grid.axis,
            "first_axis": result.first_axis or "trace",
            "second_axis": result.second_axis or "trace",
            "traces": result.traces,
            "threshold": result.threshold,
            "permutations": result.permutations,
            "block_traces": result.block_traces,
        },
    )


@content_of.register
def _temporal(result: TemporalHistogram) -> Content:
    return Content(
        "temporal histogram",
        {
            "conductance_edges": _edges(result.grid),
            "first_trace": Quantity(result.first_trace, "", ("column",)),
            "traces": Quantity(result.traces, "traces", ("column",)),
            "counts": Quantity(result.counts, "samples", ("column", "conductance")),
        },
        {"axis": result.grid.axis, "traces_a_column": result.traces_a_column, "normalisation": "samples"},
    )


@content_of.register
def _length(result: LengthHistogram) -> Content:
    one, curve = ("length",), result.survival
    return Content(
        f"length histogram: {result.kind}",
        {
            "length_edges": Quantity(result.edges, result.unit),
            "counts": Quantity(result.counts, "lengths", one),
            "censored_counts": Quantity(result.censored_counts, "lengths", one),
            "density": Quantity(result.density, result.density_unit, one),
            "survival_length": Quantity(curve.length, result.unit, ("end",)),
            "survival": Quantity(curve.survival, "", ("end",)),
            "survival_low": Quantity(curve.low, "", ("end",)),
            "survival_high": Quantity(curve.high, "", ("end",)),
        },
        {
            "normalisation": result.density_unit,
            "traces": result.traces,
            "over": result.over,
            "none": result.none,
            "median": curve.median,
        },
    )


@content_of.register
def _shifted(result: ShiftedCorrelation) -> Content:
    return Content(
        "shifted correlation",
        {
            "conductance_edges": _edges(result.grid),
            "shift": Quantity(result.shift, "traces", ("shift",)),
            "same_bin": Quantity(result.same_bin, "", ("shift", "conductance")),
            "mean": Quantity(result.mean, "", ("shift",)),
            "weak": Quantity(result.weak, "", ("conductance",)),
        },
        {
            "axis": result.grid.axis,
            "traces": result.traces,
            "chance": result.chance,
            "decay_traces": result.decay.length_traces,
            "decay_traces_low": result.decay.length_low,
            "decay_traces_high": result.decay.length_high,
            "statement": result.text,
        },
    )


@content_of.register
def _difference(result: Difference) -> Content:
    one = ("conductance",)
    return Content(
        "difference of conductance histograms",
        {
            "conductance_edges": _edges(result.grid),
            "density": Quantity(result.density, result.density_unit, one),
            "density_low": Quantity(result.density_low, result.density_unit, one),
            "density_high": Quantity(result.density_high, result.density_unit, one),
        },
        {
            "axis": result.grid.axis,
            "normalisation": result.density_unit,
            "scale": result.scale,
            "scale_low": result.scale_low,
            "scale_high": result.scale_high,
            "scale_is_fitted": result.scale_is_fitted,
        },
    )


@content_of.register
def _comparison(result: Comparison) -> Content:
    quantities = {"conductance_edges": _edges(result.grid)}
    attributes: dict[str, Any] = {"axis": result.grid.axis, "normalisation": result.density_unit}
    for place, part in enumerate(result.parts):
        mine = content_of(part.histogram)
        quantities |= {f"{name}_{place}": one for name, one in mine.quantities.items() if name != "conductance_edges"}
        attributes |= {
            f"name_{place}": part.name,
            f"traces_{place}": part.histogram.traces,
            f"effective_traces_{place}": part.resampling.effective_traces,
        }
    return Content("conductance histograms compared", quantities, attributes)


def columns_of(result: Any) -> dict[str, Array]:
    """Return a result as columns of a table, one row a bin (or pair of bins); units stand in ``*_unit`` columns.

    Ends of bins are named as in ``histogram.csv`` (``g_low_g0``, ``g_high_g0``) for conductance, ``<axis>_low`` and
    ``<axis>_high`` for other axes; the second conductance axis of a correlation is ``second_g_low_g0``.
    """
    if isinstance(result, ConductanceHistogram):
        return result.table().columns()
    content = content_of(result)
    axes = max((one.along for one in content.quantities.values()), key=len)
    sizes = max((one.values.shape for one in content.quantities.values() if one.along == axes), key=len)
    columns: dict[str, Array] = {}
    for place, axis in enumerate(axes):
        for name, values in _ends(content, axis, place, sizes[place]).items():
            columns[name] = _spread(values, place, sizes)
    for name, one in content.quantities.items():
        if one.along and set(one.along) <= set(axes) and (one.along == axes or len(one.along) == 1):
            if one.along == axes:
                columns[name] = one.values.ravel()
            elif one.along[0] != axes[-1] or len(axes) == 1 or axes[0] != axes[-1]:
                columns[name] = _spread(one.values, axes.index(one.along[0]), sizes)
            if one.unit and name in columns:
                columns[f"{name}_unit"] = np.full(int(np.prod(sizes)), one.unit)
    return columns


def _ends(content: Content, axis: str, place: int, size: int) -> dict[str, Array]:
    if f"{axis}_edges" not in content.quantities:
        return {} if axis in content.quantities else {axis: np.arange(size)}
    edges = content.quantities[f"{axis}_edges"].values
    if axis != "conductance":
        return {f"{axis}_low": edges[:-1], f"{axis}_high": edges[1:]}
    which = "second_" if place and content.kind.startswith("2D correlation") else ""
    return {f"{which}g_low_g0": edges[:-1], f"{which}g_high_g0": edges[1:]}


def _spread(values: Array, place: int, sizes: tuple[int, ...]) -> Array:
    shape = [1] * len(sizes)
    shape[place] = len(values)
    return np.broadcast_to(values.reshape(shape), sizes).ravel()


def uhi_of(result: ConductanceHistogram | DisplacementHistogram) -> dict[str, Any]:
    """Return the sample counts of a histogram in the serialisation of UHI, schema 1.

    Under- and overflow of a conductance histogram are what its ``excluded`` counts as under and over (as non-positive
    too, on a logarithmic axis); those of a 2D histogram are not kept.

    Notes
    -----
    Unified Histogram Interface of the Scikit-HEP project, "Serialization", schema version 1.
    """
    if isinstance(result, ConductanceHistogram):
        under = result.excluded["under"] + result.excluded["non_positive"]
        values = np.concatenate([[under], result.counts, [result.excluded["over"]]]).astype(np.int64)
        axes = [_uhi_axis(result.edges_g0, "conductance", "G0", True)]
        unit, traces = result.density_unit, result.traces
    elif isinstance(result, DisplacementHistogram):
        values = result.counts
        axes = [
            _uhi_axis(result.drive_edges, "displacement", result.drive_unit, False),
            _uhi_axis(result.grid.edges_g0, "conductance", "G0", False),
        ]
        unit, traces = result.density_unit, result.traces
    else:
        raise CallError(f"a {type(result).__name__} is no histogram of counts", "UHI", "take a 1D or 2D histogram")
    return {
        "uhi_schema": 1,
        "axes": axes,
        "storage": {"type": "int", "values": values},
        "metadata": {"traces": int(traces), "density_unit": unit, "made_by": "meseta"},
    }


def _uhi_axis(edges: Array, label: str, unit: str, flow: bool) -> dict[str, Any]:
    return {
        "type": "variable",
        "edges": np.asarray(edges, np.float64),
        "underflow": flow,
        "overflow": flow,
        "circular": False,
        "metadata": {"label": label, "unit": unit},
    }
