"""What recordings do to a plateau finder: gaps, faults, repeated samples, other number formats, very long traces."""

from dataclasses import replace

import numpy as np
import pytest
from test_segmentation_finder import RELATIVE, SIGMA, STEP_NM, ideal, recording

from meseta.analysis import Analysis
from meseta.recipe import Recipe
from meseta.segmentation import optimal_partition
from meseta.traces import ArraySamples, Quality, TraceSet


def noisy(clean, rng):
    return clean * (1 + RELATIVE * rng.standard_normal(len(clean))) + SIGMA * rng.standard_normal(len(clean))


def with_quality(rows, marks):
    """Return traces whose samples ``marks`` (trace, start, stop, bit) carry a fault."""
    traces = TraceSet.from_arrays(rows, step_nm=STEP_NM)
    quality = np.zeros(traces.samples, np.uint8)
    for trace, start, stop, bit in marks:
        quality[traces.offsets[trace] + start : traces.offsets[trace] + stop] |= bit
    return replace(traces, quality=ArraySamples(quality))


def test_gaps_within_a_plateau_are_marked():
    rng = np.random.default_rng(1)
    rows = [noisy(ideal(2e-4), rng) for _ in range(10)]
    for row in rows:
        row[230:250] = np.nan  # in the plateau of one atom, 200 to 350
        row[300:305] = np.nan
        row[90:95] = np.nan  # in the plateau of two atoms, 80 to 200
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    one = table.take(np.isclose(table.level_g0, 0.98, rtol=0.02))
    assert one.missing_samples.tolist() == [25] * 10
    assert one.longest_gap_samples.tolist() == [20] * 10
    assert one.start.tolist() == [200] * 10 and one.stop.tolist() == [350] * 10
    two = table.take(np.isclose(table.level_g0, 1.95, rtol=0.02))
    assert two.missing_samples.tolist() == [5] * 10
    others = table.take(~np.isclose(table.level_g0, 0.98, rtol=0.02) & ~np.isclose(table.level_g0, 1.95, rtol=0.02))
    assert len(others) == 20 and not np.any(others.missing_samples)


@pytest.mark.parametrize(("gap", "parts"), [((230, 254), 1), ((230, 300), 2)])
def test_a_plateau_ends_at_a_gap_in_which_another_might_lie(gap, parts):
    """Up to 0.05 nm (25 samples) are bridged in a metal: who misses far more cannot say that nothing happened."""
    rng = np.random.default_rng(8)
    rows = [noisy(ideal(2e-4), rng) for _ in range(10)]
    for row in rows:
        row[slice(*gap)] = np.nan
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    one = table.take(np.isclose(table.level_g0, 0.98, rtol=0.02))
    assert len(one) == 10 * parts
    first = one.take(np.flatnonzero(one.start == 200))
    if parts == 1:
        assert set(one.stop) == {350} and set(one.censored) == {""}
        return
    last = one.take(np.flatnonzero(one.start == 300))
    assert set(first.stop) == {230} and set(last.stop) == {350}
    assert set(one.censored) == {"gap"} and not np.any(one.missing_samples)
    assert np.all(np.isnan(first.jump_after_decades)) and np.all(np.isnan(last.jump_before_decades))
    assert np.all(first.jump_before_decades < 0) and np.all(np.isfinite(last.jump_after_decades))


def test_a_gap_before_the_first_plateau_or_after_the_last_cuts_nothing_else():
    rng = np.random.default_rng(9)
    rows = [noisy(ideal(2e-4), rng)[:700] for _ in range(10)]
    whole = Analysis(TraceSet.from_arrays([row.copy() for row in rows], step_nm=STEP_NM)).plateaus()
    for row in rows:
        row[:40] = np.nan
        row[640:] = np.nan
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    assert len(table) == len(whole)
    assert set(table.start[table.level_g0 > 2.5]) == {40}
    assert set(table.censored[table.level_g0 > 0.5]) == {""}


def test_a_plateau_neither_begins_nor_ends_in_a_gap():
    rng = np.random.default_rng(2)
    rows = [noisy(ideal(), rng) for _ in range(10)]
    for row in rows:
        row[190:215] = np.nan  # over the step from two atoms to one
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    two, one = (table.take(np.isclose(table.level_g0, level, rtol=0.02)) for level in (1.95, 0.98))
    assert two.stop.tolist() == [190] * 10 and one.start.tolist() == [215] * 10
    assert not np.any(two.missing_samples) and not np.any(one.missing_samples)


@pytest.mark.parametrize("bit", [Quality.UNTRUSTED, Quality.SEAM, Quality.SLEWING])
def test_untrusted_samples_have_no_weight_and_are_marked(bit):
    rng = np.random.default_rng(3)
    rows = [noisy(ideal(), rng) for _ in range(10)]
    for row in rows:
        row[240:260] = 3.0  # nonsense, known to be so
    marked = with_quality(rows, [(trace, 240, 260, bit) for trace in range(10)])
    table = Analysis(marked).plateaus()
    one = table.take(np.isclose(table.level_g0, 0.98, rtol=0.02))
    assert one.start.tolist() == [200] * 10 and one.stop.tolist() == [350] * 10
    assert one.missing_samples.tolist() == [20] * 10
    believed = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    assert len(believed) > len(table)


def test_after_samples_flagged_saturated_a_plateau_is_censored():
    rng = np.random.default_rng(4)
    rows = [noisy(ideal(), rng) for _ in range(10)]
    table = Analysis(with_quality(rows, [(trace, 0, 120, Quality.SATURATED) for trace in range(10)])).plateaus()
    two = table.take(np.isclose(table.level_g0, 1.95, rtol=0.02))
    assert two.start.tolist() == [120] * 10
    assert set(two.censored) == {"saturation"}
    assert not np.any(table.level_g0 > 2.5)


def test_gaps_are_said_in_the_cautions():
    from meseta.figures.cautions import cautions

    rng = np.random.default_rng(5)
    rows = [noisy(ideal(), rng) for _ in range(10)]
    assert not any("missing or untrusted" in text for text in cautions(Analysis(TraceSet.from_arrays(rows))))
    for row in rows:
        row[230:250] = np.nan
    texts = cautions(Analysis(TraceSet.from_arrays(rows)))
    assert any("10 of 30 plateaus" in text and "20 in a row" in text for text in texts)


def test_repeated_samples_make_no_plateaus():
    # A logger faster than its converter writes every reading four times.
    rng = np.random.default_rng(6)
    rows = [np.repeat(noisy(ideal(2e-4), rng), 4) for _ in range(20)]
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM / 4)).plateaus()
    assert len(table) == 80
    starts = table.start.reshape(20, 4)
    assert np.all(np.abs(starts[:, :3] - [0, 320, 800]) <= 4)


def test_number_formats_agree():
    rng = np.random.default_rng(7)
    rows = [noisy(ideal(2e-4), rng).astype(np.float32) for _ in range(8)]
    one = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    other = Analysis(TraceSet.from_arrays([row.astype(np.float64) for row in rows], step_nm=STEP_NM)).plateaus()
    assert all(np.array_equal(one[name], other[name]) for name in ("trace", "start", "stop", "level_g0"))
    y = np.repeat(rng.standard_normal(6) * 5, 80) + rng.standard_normal(480)
    single = y.astype(np.float32)
    assert np.array_equal(optimal_partition(single, 18.0), optimal_partition(single.astype(np.float64), 18.0))


def test_a_staircase_without_noise_is_exact():
    table = Analysis(TraceSet.from_arrays([ideal(2e-4)] * 5, step_nm=STEP_NM)).plateaus()
    assert table.start.reshape(5, 4)[:, :3].tolist() == [[0, 80, 200]] * 5
    assert table.level_g0.reshape(5, 4)[0].tolist() == pytest.approx([2.9, 1.95, 0.98, 2e-4], rel=1e-4)


def test_a_trace_of_ten_million_samples():
    # The staircase 6,667 times slower, at 10 million samples; long traces are averaged before the search.
    rng = np.random.default_rng(8)
    clean = np.repeat(ideal(2e-4).astype(np.float32), 6667)[:10_000_000]
    g = clean * (1 + np.float32(RELATIVE) * rng.standard_normal(len(clean), np.float32))
    g += np.float32(SIGMA) * rng.standard_normal(len(clean), np.float32)
    recipe = Recipe().with_settings(["noise.floor_sigma_g0=1e-6", "noise.relative_noise=0.01"])
    table = Analysis(TraceSet.from_arrays([g], step_nm=STEP_NM / 6667), recipe).plateaus()
    assert table.level_g0 == pytest.approx([2.9, 1.95, 0.98, 2e-4], rel=0.01)
    assert np.all(np.abs(table.start[:3] - np.array([0, 80, 200]) * 6667) <= 1)


def test_small_steps_of_slow_noise_are_one_plateau_and_atoms_are_not():
    # A contact of one atom that shifts by 0.15 G0 and stays; then two contacts that differ by 0.6 G0.
    rng = np.random.default_rng(9)
    parts = [np.full(100, 1.95), np.full(90, 1.05), np.full(90, 0.9), np.full(1220, 0.0)]
    rows = [noisy(np.concatenate(parts), rng) for _ in range(10)]
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    assert table.start.reshape(10, 2).tolist() == [[0, 100]] * 10
    finer = Recipe().with_settings(["plateaus.join_g0=0.05"])
    assert len(Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM), finer).plateaus()) == 30
    parts[1], parts[2] = np.full(90, 1.35), np.full(90, 0.75)
    rows = [noisy(np.concatenate(parts), rng) for _ in range(10)]
    assert len(Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()) == 30


def test_where_tunnelling_runs_into_a_plateau_the_bend_is_left_out():
    # Tunnelling of 10 decades/nm falls beside a molecule of 8 floor sigma; it adds a twentieth where it is 0.4 sigma.
    rng = np.random.default_rng(10)
    level, steps = 8 * SIGMA, np.arange(600)
    tunnelling = 3e-4 * 10 ** (-10 * STEP_NM * steps)
    molecule = np.where(steps < 300, level, 0.0)
    clean = np.concatenate([np.full(150, 1.95), np.full(150, 0.98), tunnelling + molecule, np.zeros(600)])
    rows = [noisy(clean, rng) for _ in range(60)]
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    molecules = table.take(table.kind == "molecule")
    settled = 300 + int(np.argmax(tunnelling < 0.05 * level))
    assert len(molecules) >= 57
    assert abs(np.median(molecules.start) - settled) <= 12
    assert abs(np.median(molecules.stop) - 600) <= 1
    away = np.log10(molecules.level_g0 / level)
    assert abs(np.median(away)) < 0.01
    assert abs(np.mean(away)) < 0.02


def test_the_noise_model_that_is_stated_decides():
    traces = recording(10, molecule=2e-4)
    found = Analysis(traces).plateaus()
    deaf = Analysis(traces, Recipe().with_settings(["noise.floor_sigma_g0=1e-4"])).plateaus()
    assert np.any(found.kind == "molecule") and not np.any(deaf.kind == "molecule")
    slow = Analysis(traces, Recipe().with_settings(["noise.rise_samples=30.0"])).plateaus()
    assert len(slow) < len(found)  # 5 rise times are 150 samples: the plateaus of 80 and 120 samples are too short
    early = Analysis(traces, Recipe().with_settings(["noise.saturation_g0=2.5"])).plateaus()
    assert not np.any(early.level_g0 > 2.5)
