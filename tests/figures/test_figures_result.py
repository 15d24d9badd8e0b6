"""The result figure says what it shows: units, normalisation, intervals; labels stay apart; nothing is silent."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
from figure_fakes import make_displacement, make_fit, make_grid, make_histogram, make_table
from hypothesis import given, settings
from hypothesis import strategies as st

from meseta import figures, typeset
from meseta.figures.labels import spread
from meseta.histograms import Grid
from meseta.recipe.figure import FigureSettings
from meseta.recipe.histogram import DisplacementHistogramSettings

SETTINGS = FigureSettings()


def panels(figure):
    """Return the 2D panel, the 1D panel and the colour bar."""
    plane, side, bar = figure.axes[:3]
    return plane, side, bar


def words(figure):
    return [text.get_text() for text in figure.findobj(lambda one: hasattr(one, "get_text")) if text.get_text()]


def label_boxes(side):
    labels = [text for text in side.texts if (text.get_gid() or "").startswith("peak-label")]
    return [label.get_window_extent() for label in labels]


def test_axes_carry_quantity_unit_and_normalisation(molecule):
    plane, side, bar = panels(figures.result_figure(*molecule, SETTINGS))
    assert plane.get_xlabel() == "Displacement (nm)"
    assert plane.get_ylabel() == "Conductance (G₀)"
    assert side.get_xlabel() == "Length (nm per trace per decade)"
    assert bar.get_xlabel() == "counts per trace per nm per decade, square-root scale"


def test_linear_axis_is_stated_in_g0(metal):
    plane, side, bar = panels(figures.result_figure(*metal, SETTINGS))
    assert side.get_xlabel() == "Length (nm per trace per G₀)"
    assert "per G₀" in bar.get_xlabel()
    assert [text.get_text() for text in plane.get_yticklabels()] == ["0", "1", "2", "3", "4", "5"]


def test_a_smoothed_curve_says_so(metal):
    plain = panels(figures.result_figure(*metal, SETTINGS))[1]
    smooth = panels(figures.result_figure(*metal, FigureSettings(smoothing_bins=3.0)))[1]
    assert smooth.get_xlabel().endswith("smoothed over 3 bins")
    assert "smoothed" not in plain.get_xlabel()

    def roughness(side):
        curve = max(side.get_lines(), key=lambda line: len(line.get_xdata()))
        values = np.asarray(curve.get_xdata(), float)
        return np.nansum(np.abs(np.diff(values)))

    assert roughness(smooth) < 0.8 * roughness(plain)


def test_decades_are_typeset(molecule):
    plane, _, _ = panels(figures.result_figure(*molecule, SETTINGS))
    labels = [text.get_text() for text in plane.get_yticklabels()]
    assert labels[0] == "10⁻⁷"
    assert labels[-1] == "1"


def test_labels_have_the_rounding_of_the_table(metal):
    _, _, fit = metal
    shown = words(figures.result_figure(*metal, SETTINGS))
    for row in range(3):
        low, high = fit.table.position_low_g0[row], fit.table.position_high_g0[row]
        assert typeset.value_with_uncertainty(fit.table.position_g0[row], low, high, "G0") in shown


@pytest.mark.parametrize("width_mm", [86.0, 178.0])
def test_close_peaks_have_labels_apart(metal, width_mm):
    histogram, plane, fit = metal
    positions, sigmas, areas = [0.97, 1.0, 1.02, 1.05], [0.07] * 4, [0.2] * 4
    close = replace(fit, table=make_table(fit.grid, positions, sigmas, areas, names=["a", "b", "third peak", "4"]))
    _, side, _ = panels(figures.result_figure(histogram, plane, close, FigureSettings(width_mm=width_mm)))
    boxes = label_boxes(side)
    assert len(boxes) == 4
    for place, one in enumerate(boxes):
        assert not any(one.overlaps(other) for other in boxes[place + 1 :])
        assert one.y0 >= side.get_window_extent().y0 - 1
        assert one.y1 <= side.get_window_extent().y1 + 1


def test_labels_do_not_lie_on_the_curve(metal):
    histogram, _, _ = metal
    _, side, _ = panels(figures.result_figure(*metal, SETTINGS))
    for box in label_boxes(side):
        ends = side.transData.inverted().transform([(box.x0, box.y0), (box.x0, box.y1)])
        edges = histogram.grid.u_edges
        beside = (edges[1:] > ends[0, 1]) & (edges[:-1] < ends[1, 1])
        assert histogram.density[beside].max() <= ends[0, 0]


@given(
    st.lists(st.floats(0, 100), min_size=1, max_size=8),
    st.lists(st.floats(0.5, 10), min_size=8, max_size=8),
)
@settings(deadline=None, max_examples=80)
def test_spread_places_do_not_overlap(wanted, sizes):
    wanted, sizes = sorted(wanted), sizes[: len(wanted)]
    places = spread(wanted, sizes, 0.0, 100.0)
    edges = [(place - size / 2, place + size / 2) for place, size in zip(places, sizes, strict=True)]
    assert all(after[0] >= before[1] - 1e-6 for before, after in itertools.pairwise(edges))
    assert edges[0][0] >= -1e-6
    assert edges[-1][1] <= 100 + 1e-6 or sum(sizes) > 100


def test_spread_leaves_what_fits_where_it_is():
    assert spread([10, 50, 90], [5, 5, 5], 0, 100) == pytest.approx([10, 50, 90])


def test_doubtful_peak_says_so(metal):
    histogram, plane, fit = metal
    status = ["ok", "cut by the range of the fit", "ok"]
    table = make_table(fit.grid, [0.97, 1.85, 2.75], [0.07, 0.16, 0.22], [0.25, 0.18, 0.14], status=status)
    shown = words(figures.result_figure(histogram, plane, replace(fit, table=table), SETTINGS))
    assert any("cut by the range of the fit" in text for text in shown)


def test_feature_that_dwarfs_the_peaks_is_cut_and_its_height_written(molecule):
    histogram, _, _ = molecule
    figure = figures.result_figure(*molecule, SETTINGS)
    _, side, _ = panels(figure)
    assert side.get_xlim()[1] < histogram.density.max() / 2
    assert f"to {typeset.number(float(histogram.density.max()), 2)}" in words(figure)


def test_logarithmic_count_axis_shows_everything(molecule):
    histogram, _, _ = molecule
    _, side, _ = panels(figures.result_figure(*molecule, FigureSettings(count_axis="logarithmic")))
    assert side.get_xscale() == "log"
    assert side.get_xlim()[1] >= histogram.density.max()


@pytest.mark.parametrize("colour_scale", ["linear", "square_root", "logarithmic"])
@pytest.mark.parametrize("colour_map", ["meseta", "cividis"])
def test_cells_without_a_sample_are_the_paper(molecule, colour_scale, colour_map):
    chosen = FigureSettings(colour_scale=colour_scale, colour_map=colour_map)
    plane, _, bar = panels(figures.result_figure(*molecule, chosen))
    paper = (np.asarray(plane.images[0].get_array())[..., :3] == 255).all(axis=2)
    assert np.array_equal(paper, molecule[1].counts.T == 0)
    assert ("scale" in bar.get_xlabel()) == (colour_scale != "linear")


def test_different_axes_are_not_shared(metal, molecule):
    plane, side, _ = panels(figures.result_figure(molecule[0], metal[1], molecule[2], SETTINGS))
    assert plane.get_ylim() == (0, 5)
    assert side.get_ylim() == (-7, 0)
    assert any(text.get_text() for text in side.get_yticklabels())


def nothing(grid):
    """Return results without a sample."""
    rng = np.random.default_rng(0)
    histogram = make_histogram(grid, np.zeros(grid.bins), 0, "nm / trace / decade", rng)
    histogram = replace(histogram, density_low=np.full(grid.bins, np.nan), density_high=np.full(grid.bins, np.nan))
    plane = make_displacement(grid, -0.5, 2, 20, lambda z, u: 0 * (z + u), rng, traces=1)
    fit = make_fit(histogram, [1e-3], [0.1], [0.1], -5, -1, np.zeros_like)
    empty = replace(fit, table=fit.table.take(np.zeros(1, bool)), components=fit.components[:0])
    return histogram, replace(plane, traces=0, not_aligned=7), empty


@pytest.mark.parametrize("width_mm", [86.0, 178.0])
def test_empty_results_are_drawn_in_words(width_mm):
    grid = Grid(10.0 ** np.linspace(-6, 0, 61), "logarithmic")
    shown = words(figures.result_figure(*nothing(grid), FigureSettings(width_mm=width_mm)))
    assert any("no trace takes part" in text for text in shown)
    assert any("has a zero of displacement" in text for text in shown)


@pytest.mark.parametrize("why", ["no sample lies in the range of the fit", ""])
def test_no_peak_is_said_with_its_reason(molecule, why):
    histogram, plane, fit = molecule
    row = make_table(fit.grid, [np.nan], [np.nan], [np.nan], status=[why or "ok"])
    table = row if why else row.take(np.zeros(1, bool))
    empty = replace(fit, table=table, components=fit.components[: len(table)])
    shown = words(figures.result_figure(histogram, plane, empty, SETTINGS))
    assert any(text.startswith("no peak was fitted") and why in text for text in shown)


@pytest.mark.parametrize("scale", [1e-6, 1.0, 1e9])
def test_any_size_of_density(molecule, scale):
    histogram, plane, fit = molecule
    parts = {name: getattr(histogram, name) * scale for name in ("density", "density_low", "density_high")}
    curves = {name: getattr(fit, name) * scale for name in ("model", "background", "components", "observed")}
    figure = figures.result_figure(
        replace(histogram, **parts), replace(plane, density=plane.density * scale), replace(fit, **curves), SETTINGS
    )
    low, high = panels(figure)[1].get_xlim()
    assert 0.3 * scale < high - low < 2 * scale


def test_one_bin(molecule):
    grid = Grid(np.array([1e-4, 1e-3]), "logarithmic")
    rng = np.random.default_rng(1)
    histogram = make_histogram(grid, np.array([1.0]), 30, "nm / trace / decade", rng)
    plane = make_displacement(grid, 0.0, 1.0, 2, lambda z, u: 5 + 0 * (z + u), rng)
    fit = make_fit(histogram, [3e-4], [0.1], [0.1], -4, -3, np.zeros_like)
    figure = figures.result_figure(histogram, plane, fit, SETTINGS)
    assert panels(figure)[0].get_ylim() == (-4, -3)


def test_title_is_drawn_and_no_text_leaves_the_page(molecule):
    figure = figures.result_figure(*molecule, SETTINGS, "night 14, wire M3")
    assert "night 14, wire M3" in words(figure)
    page = figure.bbox
    for text in figure.findobj(lambda one: hasattr(one, "get_text")):
        if text.get_text() and text.get_visible():
            box = text.get_window_extent()
            assert box.x0 >= page.x0 - 2, text
            assert box.x1 <= page.x1 + 2, text
            assert box.y0 >= page.y0 - 2, text
            assert box.y1 <= page.y1 + 2, text


def crossing(one, other):
    """Return whether two broken lines cross (sides of points, as in any textbook of geometry)."""

    def side(a, b, c):
        return (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])

    return any(
        side(a, b, c) * side(a, b, d) < 0 and side(c, d, a) * side(c, d, b) < 0
        for a, b in itertools.pairwise(one)
        for c, d in itertools.pairwise(other)
    )


def test_hairlines_of_crowded_labels_do_not_cross():
    rng = np.random.default_rng(5)
    grid = make_grid("logarithmic", -6.5, 0.5, 0.02)
    positions = np.geomspace(2e-4, 8e-4, 7)
    places, sigmas = np.log10(positions), np.full(7, 0.03)
    areas = np.array([0.01, 0.2, 0.015, 0.15, 0.02, 0.1, 0.01])  # low and high ones in turn: straight lines would cross
    u = (grid.u_edges[1:] + grid.u_edges[:-1]) / 2
    density = sum(a * np.exp(-0.5 * ((u - p) / s) ** 2) for a, p, s in zip(areas, places, sigmas, strict=True)) * 10
    histogram = make_histogram(grid, density, 900, "nm / trace / decade", rng)
    fit = make_fit(histogram, positions, sigmas, areas, -4.2, -2.8, lambda at: np.full(len(at), 0.01))
    plane = make_displacement(grid, -0.5, 1.5, 60, lambda z, v: 2 * np.exp(-((v + 3.5) ** 2)) + 0 * z, rng)
    side = panels(figures.result_figure(histogram, plane, fit, SETTINGS))[1]
    lines = [line for line in side.lines if (line.get_gid() or "").startswith("peak-leader")]
    assert len(lines) >= 3
    paths = [line.get_transform().transform(np.column_stack(line.get_data())) for line in lines]
    assert not any(crossing(one, other) for one, other in itertools.combinations(paths, 2))


def test_another_event_of_alignment_is_said(molecule):
    frame = DisplacementHistogramSettings(aligned_at="plateau_end", event_low_g0=1e-5, event_high_g0=1e-2)
    shown = " ".join(words(figures.result_figure(*molecule, SETTINGS, "", frame))).replace("\n", " ")
    assert "aligned at the end of the last plateau between 1.0 × 10⁻⁵ and" in typeset_spaces(shown)
    plain = words(figures.result_figure(*molecule, SETTINGS, "", DisplacementHistogramSettings()))
    assert not any("last plateau" in text for text in plain)


def typeset_spaces(text):
    return text.replace("\u202f", " ").replace("\u2009", " ").replace("\u00a0", " ")
