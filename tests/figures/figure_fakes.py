"""Made-up results with the shape of real ones."""

from __future__ import annotations

from dataclasses import fields

import numpy as np

from meseta.histograms import ConductanceHistogram, DisplacementHistogram, Grid
from meseta.peaks import PeakFit, PeakTable, PositionShift


def bell(u, centre, sigma):
    return np.exp(-0.5 * ((u - centre) / sigma) ** 2) / (sigma * np.sqrt(2 * np.pi))


def make_grid(axis, low, high, width):
    u = np.arange(round((high - low) / width) + 1) * width + low
    return Grid(10**u if axis == "logarithmic" else u, axis)


def make_histogram(grid, density, traces, unit, rng):
    scale = np.full(grid.bins, 0.0005)
    counts = rng.poisson(np.maximum(density / scale, 0)).astype(np.int64)
    seen = counts * scale
    error = np.sqrt(np.maximum(counts, 1)) * 2.5 * scale
    return ConductanceHistogram(
        grid=grid,
        counts=counts,
        traces=traces,
        traces_in_bin=np.minimum(counts, traces),
        density=seen,
        density_low=np.maximum(seen - 2 * error, 0),
        density_high=seen + 2 * error,
        density_unit=unit,
        excluded={"under": 12, "over": 40, "non_positive": 3, "saturated": 0, "untrusted": 0, "nan": 0, "outside": 7},
        scheme="moving blocks of 12 traces",
        scale=scale,
    )


def make_table(grid, positions, sigmas, areas, names=None, status=None, relative=0.01):
    rows = len(positions)
    position = np.asarray(positions, float)
    low, high = position * (1 - relative), position * (1 + relative)
    text = lambda value: np.full(rows, value)  # noqa: E731
    known = {
        "peak": np.array(names or [str(row + 1) for row in range(rows)], np.str_),
        "axis": text(grid.axis),
        "shape": text("gaussian"),
        "background": text("linear"),
        "fit_low_g0": np.full(rows, grid.edges_g0[0]),
        "fit_high_g0": np.full(rows, grid.edges_g0[-1]),
        "traces": np.full(rows, 1388),
        "position_g0": position,
        "position_low_g0": low,
        "position_high_g0": high,
        "position_systematic_g0": position * 0.004,
        "position_siemens": position * 7.748091729863649e-05,
        "position_ohm": 1 / np.maximum(position, 1e-300) / 7.748091729863649e-05,
        "fwhm": np.asarray(sigmas, float) * 2.3548,
        "fwhm_low": np.asarray(sigmas, float) * 2.2,
        "fwhm_high": np.asarray(sigmas, float) * 2.5,
        "area_per_trace": np.asarray(areas, float),
        "area_low": np.asarray(areas, float) * 0.9,
        "area_high": np.asarray(areas, float) * 1.1,
        "height": np.asarray(areas, float) / (np.asarray(sigmas, float) * np.sqrt(2 * np.pi)),
        "status": np.array(status or ["ok"] * rows, np.str_),
        "resampling": text("moving blocks of 12 traces"),
        "area_unit": text("nm / trace"),
        "height_unit": text("nm / trace / decade"),
        "mode_g0": position * 1.01,
        "plateau_median_g0": position * 0.99,
        "plateaus": np.full(rows, 420),
    }
    for field in fields(PeakTable):
        blank = np.full(rows, "") if "Texts" in str(field.type) else np.full(rows, np.nan)
        known.setdefault(field.name, blank)
    return PeakTable(**known)


def make_fit(histogram, positions, sigmas, areas, fit_low, fit_high, background, **table):
    u_edges = histogram.grid.u_edges
    log = histogram.grid.axis == "logarithmic"
    inside = np.flatnonzero((u_edges[:-1] >= fit_low - 1e-9) & (u_edges[1:] <= fit_high + 1e-9))
    grid = Grid(histogram.grid.edges_g0[inside[0] : inside[-1] + 2], histogram.grid.axis)
    centre = (grid.u_edges[1:] + grid.u_edges[:-1]) / 2
    places = np.log10(positions) if log else np.asarray(positions, float)
    components = np.array([a * bell(centre, p, s) for p, s, a in zip(places, sigmas, areas, strict=True)])
    smooth = background(centre)
    return PeakFit(
        table=make_table(grid, positions, sigmas, areas, **table),
        grid=grid,
        model=components.sum(axis=0) + smooth,
        background=smooth,
        components=components,
        observed=histogram.density[inside],
        shifts=(
            PositionShift("fit", "bin width x 2", np.asarray(positions) * 0.002),
            PositionShift("fit", "fit range - 10 %", np.asarray(positions) * -0.004),
        ),
        goodness=3.2,
    )


def make_displacement(grid, low, high, columns, density_at, rng, traces=1380):
    edges = np.linspace(low, high, columns + 1)
    z = (edges[1:] + edges[:-1]) / 2
    u = (grid.u_edges[1:] + grid.u_edges[:-1]) / 2
    counts = rng.poisson(np.maximum(density_at(z[:, None], u[None, :]), 0)).astype(np.int64)
    width = np.diff(edges)[:, None] * grid.widths[None, :]
    unit = "counts / trace / nm / decade" if grid.axis == "logarithmic" else "counts / trace / nm / G0"
    return DisplacementHistogram(grid, edges, "nm", counts, traces, 8, counts / (traces * width), unit)
