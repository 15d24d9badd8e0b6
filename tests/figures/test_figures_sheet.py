"""Contact sheet, length series, all analyses, noise, record and correlation."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from meseta import figures, peaks, typeset
from meseta.errors import CallError
from meseta.histograms import CorrelationHistogram, Grid
from meseta.recipe.figure import FigureSettings
from meseta.traces import TraceSet

SETTINGS = FigureSettings()


def words(figure):
    return [text.get_text() for text in figure.findobj(lambda one: hasattr(one, "get_text")) if text.get_text()]


def test_sheet_shows_each_chosen_trace_once(analysis):
    rows = [3, 140, *range(20, 50)]
    pages = figures.contact_sheet(analysis.traces, analysis.plateaus(), rows, SETTINGS)
    assert [len(page.axes) for page in pages] == [24, 8]
    titles = [axes.get_title() for page in pages for axes in page.axes]
    assert titles == [""] * 32  # the number stands at the left
    numbers = [axes.get_title(loc="left") for page in pages for axes in page.axes]
    assert numbers == [typeset.integer(row) for row in rows]


def test_sheet_draws_plateaus_at_their_level_and_slope(analysis):
    table = analysis.plateaus()
    row = int(table.trace[np.argmax(np.abs(table.slope_decades_per_nm))])
    mine = table.take(table.trace == row)
    axes = figures.contact_sheet(analysis.traces, table, [row], SETTINGS)[0].axes[0]
    lines = [line for line in axes.get_lines() if line.get_linewidth() == 1.3]
    assert len(lines) == len(mine)
    drive = analysis.traces.trace_drive(row)
    for place, line in enumerate(lines):
        x, u = line.get_data()
        assert x[0] == drive[mine.start[place]]
        assert u.mean() == pytest.approx(np.log10(mine.level_g0[place]))
        assert (u[1] - u[0]) / (x[1] - x[0]) == pytest.approx(mine.slope_decades_per_nm[place], rel=1e-6)


def test_sheet_keeps_spikes_of_long_traces():
    values = np.full(50_000, 1e-3, np.float32)
    values[31_234] = 0.5
    traces = TraceSet.from_arrays([values], step_nm=1e-4)
    table = replace_nothing(traces)
    axes = figures.contact_sheet(traces, table, [0], SETTINGS)[0].axes[0]
    curve = max(axes.get_lines(), key=lambda line: len(line.get_xdata()))
    assert len(curve.get_xdata()) <= 1000
    assert np.nanmax(curve.get_ydata()) == pytest.approx(np.log10(0.5), abs=1e-6)


def replace_nothing(_):
    """Return a plateau table without rows."""
    from meseta.segmentation import PlateauTable

    return PlateauTable.empty()


@pytest.mark.parametrize(
    "values",
    [np.full(40, np.nan), np.full(40, -1e-6), np.full(1, 1e-3), np.full(40, 1e-3), np.zeros(40)],
    ids=["missing", "negative", "one sample", "constant", "zero"],
)
def test_sheet_of_odd_traces(values):
    traces = TraceSet.from_arrays([values.astype(np.float32)])
    pages = figures.contact_sheet(traces, replace_nothing(traces), [0], SETTINGS)
    assert "Drive (step)" in words(pages[0])


def test_sheet_without_traces_says_so(analysis):
    pages = figures.contact_sheet(analysis.traces, analysis.plateaus(), [], SETTINGS)
    assert "no trace was chosen" in words(pages[0])


@pytest.fixture
def series():
    # Alkanedithiols of Xu and Tao, Science 301, 1221 (2003): 10.5(5), 51(5), 630(50) megohm for 6, 8, 10 carbons.
    ohm, error = np.array([10.5e6, 51e6, 630e6]), np.array([0.5e6, 5e6, 50e6])
    conductance = 12906.403729652257 / ohm
    names = np.array(["hexane", "octane", "decane"])
    nothing = np.full(3, np.nan)
    return peaks.DecayPoints(
        np.array([6.0, 8, 10]), conductance, nothing, conductance * error / ohm, names, "carbon", "points"
    )


def test_decay_figure_states_the_published_constant_and_its_unit(series):
    result = peaks.decay(series)
    figure = figures.decay_figure(result, SETTINGS)
    shown = " ".join(words(figure))
    beta = typeset.value_with_uncertainty(result.beta, result.beta_low, result.beta_high)
    assert result.beta == pytest.approx(1.0, abs=0.1)  # published: 1.0 +- 0.1 a carbon
    assert f"β = {beta} per carbon" in shown
    assert figure.axes[0].get_xlabel() == "Length (carbon)"
    assert figure.axes[0].get_xlim()[0] == 0
    for name in ("hexane", "octane", "decane"):
        assert name in shown


def test_decay_figure_of_two_points_without_errors(series):
    nothing = np.full(2, np.nan)
    points = replace(
        series,
        length=series.length[:2],
        conductance_g0=series.conductance_g0[:2],
        length_error=nothing,
        conductance_error_g0=nothing,
        label=np.array(["", ""]),
        length_unit="",
    )
    figure = figures.decay_figure(peaks.decay(points), SETTINGS)
    assert "unit not stated" in figure.axes[0].get_xlabel()


def many_analyses(count=24):
    rng = np.random.default_rng(2)
    position = 2e-4 * (1 + 0.03 * rng.standard_normal(count))
    bins = [("25", "50", "100")[row % 3] for row in range(count)]
    ground = [("linear", "exponential")[row % 2] for row in range(count)]
    return position, {"bins per decade": bins, "background": ground}


def test_analyses_stand_in_order_with_the_chosen_one_marked():
    position, choices = many_analyses()
    position[5] = np.nan
    figure = figures.analyses_figure(position, position * 0.97, position * 1.03, choices, 7, SETTINGS)
    upper, lower = figure.axes
    drawn = next(line for line in upper.get_lines() if line.get_marker() == ".").get_ydata()
    assert np.array_equal(drawn, np.sort(position[np.isfinite(position)]))
    chosen = next(line for line in upper.get_lines() if line.get_marker() == "D")
    assert chosen.get_ydata()[0] == position[7]
    assert "1 left out" in upper.get_title(loc="right")
    labels = [text.get_text() for text in lower.get_yticklabels()]
    assert labels == ["bins per decade: 25", "50", "100", "background: linear", "exponential"]


@pytest.mark.parametrize("fault", ["lengths", "nothing"])
def test_analyses_without_sense_are_refused(fault):
    position, choices = many_analyses()
    if fault == "lengths":
        choices["region"] = ["phase"]
    else:
        position = np.full(len(position), np.nan)
    with pytest.raises(CallError):
        figures.analyses_figure(position, position, position, choices, 0, SETTINGS)


def test_noise_figure_shows_both_noises(analysis):
    noise = analysis.noise()
    figure = figures.noise_figure(noise, SETTINGS)
    lines = {line.get_label(): line for line in figure.axes[0].get_lines()}
    assert np.allclose(10 ** lines["single sample"].get_ydata(), noise.sigma_g0)
    assert "Noise, 1 σ (G₀)" in words(figure)


@pytest.mark.parametrize(
    ("unit", "values", "label", "drawn"),
    [
        ("G0 V", [2e-5, 3e-5], "Offset (nA)", [1.5496183, 2.3244275]),  # times G0 = 7.748091729e-5 S (CODATA 2022)
        ("G0", [-2e-6, 1e-6], "Offset (10⁻⁶ G₀)", [-2.0, 1.0]),
        ("G0", [0.0, 0.0], "Offset (G₀)", [0.0, 0.0]),
    ],
)
def test_offset_figure_shows_what_was_removed_against_the_record(unit, values, label, drawn):
    offset = {"removed": True, "traces": 200, "at_trace": [0, 199], "offset": values, "unit": unit}
    figure = figures.offset_figure(offset, SETTINGS)
    (line,) = figure.axes[0].get_lines()
    assert np.allclose(line.get_ydata(), drawn)
    assert line.get_xdata().tolist() == [0, 199]
    assert label in words(figure)


def correlation_of(values, threshold=0.2):
    grid = Grid(10.0 ** np.linspace(-4, 0, len(values) + 1), "logarithmic")
    return CorrelationHistogram(grid=grid, correlation=np.asarray(values, float), traces=500, threshold=threshold)


def test_correlation_scale_is_symmetric_about_zero():
    rng = np.random.default_rng(0)
    values = np.clip(rng.normal(0.2, 0.1, (30, 30)), -1, 1)
    figure = figures.correlation_figure(correlation_of((values + values.T) / 2), SETTINGS)
    low, high = figure.axes[1].get_ylim()
    assert low == -high < 0
    assert "Correlation over 500 traces" in words(figure)


def test_correlation_of_nothing_says_so():
    figure = figures.correlation_figure(correlation_of(np.full((5, 5), np.nan), np.nan), SETTINGS)
    assert any("no two bins vary" in text for text in words(figure))
