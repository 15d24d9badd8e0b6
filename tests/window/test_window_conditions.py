"""Conditions read as sentences, and their rules mean what the sentences say."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from meseta.analysis import Analysis
from meseta.selection import parse_rules
from meseta.traces import ArraySamples
from meseta.window.conditions import Condition, ConditionSet
from meseta.window.subset import mask_of
from meseta.work import Work

PLATEAU = Condition("plateau", 1.3e-4, 1.3e-3, longer_than=0.1)
BOX = Condition("settles", 1.3e-4, 1.3e-3, 0.0, 0.3)
PASSES = replace(BOX, kind="passes", low_drive=0.4, high_drive=0.6)
RANGE = Condition("range", first=10, last=29)


@pytest.fixture(scope="module")
def analysis(mixture):
    return Analysis(mixture)


def test_sentences():
    s = "\u202f"
    assert PLATEAU.sentence() == f"a plateau between 1.3{s}×{s}10⁻⁴ and 1.3{s}×{s}10⁻³{s}G₀, longer than 0.10{s}nm"
    assert replace(RANGE, inverted=True).sentence() == "not: traces 10 to 29 of the record"
    both = ConditionSet((PLATEAU, RANGE), "or")
    assert both.sentence() == f"{PLATEAU.sentence()} or {RANGE.sentence()}"
    assert ConditionSet((replace(PLATEAU, on=False), RANGE)).sentence() == RANGE.sentence()


@pytest.mark.parametrize("joined", ["and", "or"])
@pytest.mark.parametrize("inverted", [False, True])
def test_every_rule_is_understood_by_the_selection(joined, inverted):
    conditions = tuple(replace(one, inverted=inverted) for one in (PLATEAU, BOX, PASSES, RANGE))
    rule = ConditionSet(conditions, joined).rule()
    assert parse_rules([rule])


def test_a_plateau_window_picks_the_traces_that_have_a_plateau_there(analysis):
    table = analysis.plateaus()
    inside = (table.level_g0 >= 1.3e-4) & (table.level_g0 < 1.3e-3)
    expected = np.zeros(60, bool)
    expected[table.trace[inside]] = True
    mask = mask_of(analysis, Condition("plateau", 1.3e-4, 1.3e-3).rule(), Work())
    assert expected.any() and np.array_equal(mask, expected)


def test_a_box_asks_for_the_middle_of_the_plateau(analysis):
    table = analysis.plateaus()
    middle = (table.displacement_start_nm + table.displacement_stop_nm) / 2
    inside = (table.level_g0 >= 1.3e-4) & (table.level_g0 < 1.3e-3) & (middle >= 0.0) & (middle < 0.3)
    expected = np.zeros(60, bool)
    expected[table.trace[inside & table.aligned]] = True
    assert expected.any() and np.array_equal(mask_of(analysis, BOX.rule(), Work()), expected)


def test_and_or_not(analysis):
    work = Work()
    one, two = (mask_of(analysis, condition.rule(), work) for condition in (PLATEAU, RANGE))
    assert np.array_equal(mask_of(analysis, ConditionSet((PLATEAU, RANGE), "and").rule(), work), one & two)
    assert np.array_equal(mask_of(analysis, ConditionSet((PLATEAU, RANGE), "or").rule(), work), one | two)
    assert np.array_equal(mask_of(analysis, replace(RANGE, inverted=True).rule(), work), ~two)
    assert two.sum() == 20


def passing(traces, zero_drive):
    """Return which traces have a sample in the box, by plain loops over their samples."""
    met = []
    for row in range(traces.traces):
        g, x = traces.trace_conductance(row), traces.trace_drive(row) - zero_drive[row]
        met.append(bool(((g >= 1.3e-4) & (g < 1.3e-3) & (x >= 0.4) & (x < 0.6)).any()))
    return np.array(met)


def test_a_box_that_traces_pass_asks_for_samples_in_it(analysis):
    mask = mask_of(analysis, PASSES.rule(), Work())
    expected = passing(analysis.traces, analysis.result("alignment").zero_drive)
    assert 0 < expected.sum() < 60 and np.array_equal(mask, expected)
    there = mask_of(analysis, replace(PASSES, kind="settles").rule(), Work())
    assert there.any() and not (there & ~mask).any()  # a plateau there is a passage there


@pytest.mark.parametrize("explicit", [False, True])
def test_boxes_count_in_the_unit_of_the_drive(mixture, analysis, explicit):
    drive = mixture.drive
    if explicit:
        values = np.concatenate([mixture.trace_drive(row) - drive.start[row] for row in range(mixture.traces)])
        drive = replace(drive, step=np.full(mixture.traces, np.nan), relative=ArraySamples(values.astype(np.float32)))
    volts = Analysis(replace(mixture, drive=replace(drive, unit="V"), key=f"volts {explicit}"))
    zero = volts.result("alignment").zero_drive
    assert np.array_equal(mask_of(volts, PASSES.rule(), Work()), passing(volts.traces, zero))
    settles = mask_of(volts, BOX.rule(), Work())
    assert np.array_equal(settles, mask_of(analysis, BOX.rule(), Work()))
    assert settles.any()
