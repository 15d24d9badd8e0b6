"""Opening with closing, pairs of bins, parts and recordings on one axis, decay along the record: known answers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from coverage_experiments import SCENARIOS, experiment
from scipy import stats
from small_recordings import matrix_of, noise_model

from meseta.analysis import Analysis, compare_parts, compare_recordings
from meseta.errors import CallError
from meseta.histograms import (
    Grid,
    Partners,
    compared,
    conditional_histogram,
    conductance_histogram,
    correlation_histogram,
    members_of,
    opening_closing_correlation,
    pair_histograms,
    partner_rows,
    parts_by,
    resample,
    restricted,
    shifted_correlations,
    shifted_map,
)
from meseta.histograms.grids import logarithmic_edges
from meseta.histograms.shifted import decay_of
from meseta.recipe import Recipe
from meseta.traces import TraceSet, trace_table
from meseta.work import Work

WORK = Work(threads=1)
GRID = Grid(logarithmic_edges(-8, 4, 4), "logarithmic")
RECIPE = Recipe().with_values("correlation", bins_per_decade=4, low_g0=0.01, permutations=100)
RECIPE = RECIPE.with_values("resampling", replicates=300)


def linked_counts(traces: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Openings and closings of independent bins, but bin 2 of the opening and bin 5 of the closing share a cause."""
    random = np.random.default_rng(seed)
    cause = random.poisson(5, traces)
    opening, closing = random.poisson(4, (traces, 12)), random.poisson(4, (traces, 12))
    opening[:, 2], closing[:, 5] = cause + random.poisson(5, traces), cause + random.poisson(5, traces)
    return opening, closing


def cycle(opening: np.ndarray, closing: np.ndarray) -> tuple:
    """Count matrices as the steps make them: rows alternate, openings filled in one, closings in the other."""
    traces = 2 * len(opening)
    first, second = np.zeros((traces, 12), int), np.zeros((traces, 12), int)
    first[::2], second[1::2] = opening, closing
    is_opening = np.arange(traces) % 2 == 0
    partner = np.arange(traces) + np.where(is_opening, 1, -1)
    counts, other = matrix_of(first, GRID), matrix_of(second, GRID)
    counts, other = replace(counts, used=is_opening), replace(other, used=~is_opening)
    table = trace_table(traces, partner=partner)
    return counts, Partners(other, partner_rows(table, other.used), "opening"), is_opening


def test_opening_and_closing_correlation_is_numpys_between_partners() -> None:
    opening, closing = linked_counts(500, 1)
    counts, partners, kept = cycle(opening, closing)
    kept[::8] = False
    found = opening_closing_correlation(counts, partners, kept, RECIPE.correlation, noise_model(), 1, WORK)
    mine = kept[::2]
    expected = np.corrcoef(opening[mine].T, closing[mine].T)[:12, 12:]
    assert found.correlation == pytest.approx(expected, abs=1e-12)
    assert found.traces == mine.sum()
    assert (found.first_axis, found.second_axis) == ("opening", "closing")
    assert [tuple(pair) for pair in np.argwhere(found.significant)] == [(2, 5)]


def test_the_axes_stay_where_they_are_when_closings_are_analysed() -> None:
    opening, closing = linked_counts(400, 2)
    counts, partners, kept = cycle(opening, closing)
    turned = Partners(counts, np.where(~kept, np.arange(len(kept)) - 1, -1), "closing")
    other = opening_closing_correlation(partners.counts, turned, ~kept, RECIPE.correlation, noise_model(), 1, WORK)
    found = opening_closing_correlation(counts, partners, kept, RECIPE.correlation, noise_model(), 1, WORK)
    assert other.correlation == pytest.approx(found.correlation, abs=1e-12)


def test_opening_closing_significance_keeps_its_level() -> None:
    """Independent openings and closings: a map is called significant in 5 % of 100 records (0 to 11)."""
    rejected, random = 0, np.random.default_rng(9)
    for seed in range(100):
        counts, partners, kept = cycle(random.poisson(3, (150, 12)), random.poisson(3, (150, 12)))
        found = opening_closing_correlation(counts, partners, kept, RECIPE.correlation, noise_model(), seed, WORK)
        rejected += bool(found.significant.any())
    assert rejected <= 11


def test_without_closings_there_is_a_note_and_no_number() -> None:
    counts = matrix_of(np.ones((30, 12)), GRID)
    none = replace(counts, used=np.zeros(30, bool))
    partners = Partners(none, partner_rows(trace_table(30), none.used), "opening")
    found = opening_closing_correlation(counts, partners, counts.used, RECIPE.correlation, noise_model(), 1, WORK)
    assert found.traces == 0
    assert np.isnan(found.correlation).all()
    assert "partner" in found.note


def sweeps(cycles: int, seed: int) -> TraceSet:
    """Openings and closings whose plateaus share their length."""
    random = np.random.default_rng(seed)
    rows = []
    for _ in range(cycles):
        long = int(random.integers(20, 200))
        down = np.concatenate([np.full(100, 3.0), np.full(long, 1e-2), np.full(300 - long, 1e-6)])
        rows += [down, down[::-1]]
    values = np.array(rows) * np.exp(0.05 * random.standard_normal((2 * cycles, 400)))
    values += 1e-6 * random.standard_normal(values.shape)
    partner = np.arange(2 * cycles) + np.tile([1, -1], cycles)
    direction = np.tile(["opening", "closing"], cycles)
    return TraceSet.from_arrays(values, step_nm=0.002, direction=direction, partner=partner)


def test_step_of_the_analysis_correlates_openings_with_their_closings() -> None:
    recipe = Recipe().with_values("correlation", permutations=50, bins_per_decade=5)
    analysis = Analysis(sweeps(120, 3), recipe)
    found = analysis.result("opening_closing", WORK)
    place = found.bins_at(1e-2, 1e-2)
    assert found.traces == 120
    assert place is not None
    assert found.correlation[place] > 0.5
    assert found.significant[place]


# -- pairs of bins ---------------------------------------------------------------------------------------------------


def test_pair_of_bins_splits_the_traces_and_their_histograms_add_up() -> None:
    random = np.random.default_rng(4)
    counts = matrix_of(random.poisson(3, (400, 12)) + (random.random((400, 1)) < 0.3) * np.tile([0, 9, 0, 9], 3), GRID)
    kept = random.random(400) < 0.8
    recipe = RECIPE
    table = correlation_histogram(counts, kept, recipe.correlation, noise_model(), 1, WORK)
    first, second = table.bins_at(0.02, 0.2)
    pair = pair_histograms(counts, kept, table.range_g0(first), table.range_g0(second), recipe.histogram)
    assert pair.correlation == pytest.approx(table.correlation[first, second], abs=1e-12)
    for split in (pair.first, pair.second):
        assert np.array_equal(split.yes.counts + split.no.counts, split.everything.counts)
        assert split.yes.traces + split.no.traces == kept.sum()
    rich = [counts.counts[:, place] > counts.counts[kept, place].mean() for place in (first, second)]
    assert np.array_equal(pair.both.counts, counts.counts[kept & rich[0] & rich[1]].sum(0))
    assert np.array_equal(pair.neither.counts, counts.counts[kept & ~rich[0] & ~rich[1]].sum(0))
    assert pair.share_both == pytest.approx((rich[0] & rich[1])[kept].mean())
    assert "rich in both" in pair.text


def test_pair_of_opening_and_closing_looks_at_the_partner() -> None:
    opening, closing = linked_counts(600, 5)
    counts, partners, kept = cycle(opening, closing)
    ranges = [(float(GRID.edges_g0[at]), float(GRID.edges_g0[at + 1])) for at in (2, 5)]
    pair = pair_histograms(counts, kept, ranges[0], ranges[1], RECIPE.histogram, None, partners)
    assert pair.correlation == pytest.approx(np.corrcoef(opening[:, 2], closing[:, 5])[0, 1])
    rich = closing[:, 5] > closing[:, 5].mean()
    assert np.array_equal(pair.second.yes.counts, opening[rich].sum(0))


def test_bands_of_a_condition_come_from_the_same_draws() -> None:
    random = np.random.default_rng(6)
    counts, kept = matrix_of(random.poisson(5, (300, 12)), GRID), np.ones(300, bool)
    drawn = resample(counts, kept, trace_table(300), RECIPE.histogram, RECIPE.resampling, WORK)
    condition = np.arange(300) % 3 == 0
    split = conditional_histogram(counts, kept, condition, "every third", RECIPE.histogram, drawn)
    part = restricted(drawn, counts, condition, WORK)
    assert np.array_equal(part.counts, part.weights.astype(int) @ counts.counts[condition])
    assert part.effective_traces == pytest.approx(drawn.effective_traces / 3)
    width = (split.yes.density_high - split.yes.density_low).mean()
    # a third of the traces: bands sqrt(3) times as wide
    assert width == pytest.approx(
        np.sqrt(3) * (split.everything.density_high - split.everything.density_low).mean(), rel=0.15
    )


# -- several on one axis ---------------------------------------------------------------------------------------------


def test_kept_and_other_traces_add_up_and_differ_by_what_was_planted() -> None:
    random = np.random.default_rng(17)
    rich = np.arange(600) % 2 == 0
    counts = matrix_of(random.poisson(5, (600, 12)) + 6 * rich[:, None] * (np.arange(12) == 4), GRID)
    members, shared = members_of(
        counts, {"rich": rich, "rest": ~rich}, trace_table(600), RECIPE.histogram, RECIPE.resampling, WORK
    )
    found = compared(members, RECIPE.histogram, shared)
    assert shared
    assert [part.name for part in found.parts] == ["rich", "rest"]
    assert found.density_unit == "nm / trace / decade"
    change = found.difference(0, 1)
    assert change.density_low[4] <= 6 * 0.001 * 4 <= change.density_high[4]
    assert ((change.density_low <= 0) & (change.density_high >= 0))[np.arange(12) != 4].mean() > 0.7


def test_difference_of_parts_covers_zero_as_it_says() -> None:
    """Alternate traces of 20 records, which do not differ: the band holds zero in 95 % of the bins."""
    inside, scenario = [], SCENARIOS["independent"]
    for seed in range(20):
        matrix, table = experiment(replace(scenario, traces=400), seed)
        masks = parts_by(np.where(np.arange(400) % 2, "a", "b"), np.ones(400, bool))
        members, shared = members_of(matrix, masks, table, RECIPE.histogram, RECIPE.resampling, WORK)
        found = compared(members, RECIPE.histogram, shared)
        change, reached = found.difference(0, 1), found.parts[0].histogram.traces_in_bin
        inside.append(((change.density_low <= 0) & (change.density_high >= 0))[reached >= 20].mean())
    assert np.mean(inside) == pytest.approx(0.95, abs=0.03)


def test_specimens_are_drawn_each_on_its_own() -> None:
    counts = matrix_of(np.random.default_rng(8).poisson(5, (300, 12)), GRID)
    names = np.repeat(["a", "b", "c", "d", "e", "f"], 50)
    table = trace_table(300, specimen=names)
    masks = parts_by(names, np.ones(300, bool))
    members, shared = members_of(counts, masks, table, RECIPE.histogram, RECIPE.resampling, WORK)
    assert not shared
    assert [one.resampling.specimens for one in members] == [0] * 6
    assert all(
        (part.histogram.density_high > part.histogram.density_low).all()
        for part in compared(members, RECIPE.histogram).parts
    )


def test_recordings_with_other_floors_are_compared_where_both_have_bins() -> None:
    random = np.random.default_rng(10)
    quiet = Analysis(
        TraceSet.from_arrays(np.abs(random.normal(0, 1e-6, (60, 300))) + decays(60, 1), step_nm=0.01), RECIPE
    )
    loud = Analysis(TraceSet.from_arrays(random.normal(0, 1e-4, (50, 300)) + decays(50, 2), step_nm=0.01), RECIPE)
    found = compare_recordings({"quiet": quiet, "loud": loud}, WORK)
    one, other = (part.histogram for part in found.parts)
    assert np.array_equal(one.edges_g0, other.edges_g0)
    assert (one.traces, other.traces) == (60, 50)
    whole = quiet.histogram(WORK)
    at = np.searchsorted(whole.edges_g0, one.edges_g0[0])
    assert np.array_equal(one.counts, whole.counts[at : at + one.grid.bins])
    assert one.density == pytest.approx(whole.density[at : at + one.grid.bins])
    # every sample of the trace is somewhere, also after bins were left out
    assert one.counts.sum() + sum(one.excluded.values()) == 60 * 300
    assert any("where all have bins" in note for note in found.notes)


def decays(traces: int, seed: int) -> np.ndarray:
    random = np.random.default_rng(seed)
    return 10 ** (np.linspace(1, -8, 300) + 0.1 * random.standard_normal((traces, 1)))


def test_one_recording_without_displacement_makes_all_count_samples() -> None:
    in_nm = Analysis(TraceSet.from_arrays(decays(40, 1), step_nm=0.01), RECIPE)
    in_steps = Analysis(TraceSet.from_arrays(decays(40, 2)), RECIPE)
    found = compare_recordings({"nm": in_nm, "steps": in_steps}, WORK)
    assert {part.histogram.density_unit for part in found.parts} == {"counts / trace / decade"}
    assert any("displacement" in note for note in found.notes)


def test_parts_of_an_analysis_by_name() -> None:
    molecule = np.where(np.arange(80) < 40, "first", "second")
    analysis = Analysis(TraceSet.from_arrays(decays(80, 3), step_nm=0.01, molecule=molecule), RECIPE)
    found = compare_parts(analysis, "molecule", WORK)
    assert [part.name for part in found.parts] == ["first", "second"]
    rows = analysis.result("counts", WORK)
    expected = conductance_histogram(rows, molecule == "first", RECIPE.histogram, None)
    assert np.array_equal(found.parts[0].histogram.counts, expected.counts)
    with pytest.raises(CallError, match="no column 'molecul'"):
        compare_parts(analysis, "molecul", WORK)


def test_other_widths_are_not_compared() -> None:
    one = Analysis(TraceSet.from_arrays(decays(30, 1), step_nm=0.01), RECIPE)
    other = one.with_recipe(RECIPE.with_values("histogram", bins_per_decade=40))
    with pytest.raises(CallError, match="bins differ"):
        compare_recordings({"one": one, "other": other}, WORK)


def test_a_part_without_traces_is_left_out_with_a_note() -> None:
    found = compare_parts(Analysis(TraceSet.from_arrays(decays(30, 1), step_nm=0.01), RECIPE), "selection", WORK)
    assert [part.name for part in found.parts] == ["kept"]
    assert found.notes == ("no trace in 'not kept'",)


def test_traces_may_be_in_several_groups() -> None:
    kept = np.array([True, True, True, False])
    found = parts_by(np.array(["a;b", "a", "", "b"]), kept)
    assert {name: mask.tolist() for name, mask in found.items()} == {
        "a": [True, True, False, False],
        "b": [True, False, False, False],
    }


# -- along the record ------------------------------------------------------------------------------------------------


def test_same_bin_of_later_traces_is_the_shifted_map() -> None:
    values = np.random.default_rng(11).poisson(4, (200, 12))
    counts, kept = matrix_of(values, GRID), np.random.default_rng(12).random(200) < 0.9
    found = shifted_correlations(counts, kept, RECIPE.correlation, noise_model())
    assert found.shift.tolist() == list(range(1, kept.sum() // 10 + 1))
    for shift in (1, 7, 17):
        mine = values[kept]
        by_numpy = [np.corrcoef(mine[:-shift, at], mine[shift:, at])[0, 1] for at in range(12)]
        assert found.same_bin[shift - 1] == pytest.approx(np.array(by_numpy), abs=1e-10)
        one = shifted_map(counts, kept, RECIPE.correlation, noise_model(), shift)
        assert np.diag(one.correlation) == pytest.approx(found.same_bin[shift - 1], abs=1e-10)
    assert not found.decay.found
    assert "do not resemble" in found.text


@pytest.mark.parametrize("length", [5.0, 20.0])
def test_decay_length_of_a_known_process(length: float) -> None:
    """Half the variance an autoregression with correlation exp(-s/length), half new in every trace."""
    from scipy import signal

    held = 0
    for seed in range(20):
        random = np.random.default_rng(seed)
        keep = np.exp(-1 / length)
        slow = signal.lfilter([np.sqrt(1 - keep**2)], [1.0, -keep], random.standard_normal((4500, 4)), axis=0)[500:]
        series = (slow + random.standard_normal((4000, 4))) / np.sqrt(2)
        found = decay_of(series - series.mean(0), 200)
        assert found.found
        assert found.amplitude == pytest.approx(0.5, abs=0.15)
        assert found.length_traces == pytest.approx(length, rel=0.6)
        held += found.length_low <= length <= found.length_high
    # binomial of 20 at 95 %: at least 16 with probability 0.997
    assert held >= 16


def test_decay_is_not_found_in_white_noise() -> None:
    found = [decay_of(np.random.default_rng(seed).standard_normal((1000, 4)), 50).found for seed in range(40)]
    assert sum(found) <= stats.binom.ppf(0.999, 40, 0.15)


def test_statement_of_worth() -> None:
    counts = matrix_of(np.random.default_rng(13).poisson(5, (2000, 12)), GRID)
    drawn = resample(counts, counts.used, trace_table(2000), RECIPE.histogram, RECIPE.resampling, WORK)
    assert drawn.statement() == (
        "2\u202f000 traces are as much as 2\u202f000 independent ones (no memory along the record was found); "
        "half the error needs 6\u202f000 more traces like these"
    )
    assert replace(drawn, rows=drawn.rows[:0]).statement() == "no trace is kept"
