import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from selection_facts import TRACES, some_measures, some_plateaus, some_traces

from meseta.errors import RecipeError
from meseta.recipe.selection import SelectionSettings
from meseta.selection import Decisions, Event, RemovedRange, check_rules, select
from meseta.traces import Source


def chosen(rules, decisions=None, traces=None, direction="opening"):
    traces = traces or some_traces()
    rules = [rules] if isinstance(rules, str) else rules
    return select(
        traces, SelectionSettings(rules=rules), some_measures(), some_plateaus(), decisions or Decisions(), direction
    )


@pytest.mark.parametrize(
    ("rule", "kept"),
    [
        ("rupture_found", [0, 1, 2, 4, 5]),
        ("not rupture_found", [3, 6]),
        ("highest_g0 >= 0.8", [1, 3, 4, 6]),
        ("not (highest_g0 >= 0.8)", [0, 5]),  # trace 2 was not measured: neither above nor below
        ("known(highest_g0)", [0, 1, 3, 4, 5, 6]),
        ("not known(highest_g0)", [2]),
        ("highest_g0 >= 0.8 or rupture_found", [0, 1, 2, 3, 4, 5, 6]),
        ("0.4 < highest_g0 <= 2", [0, 1, 3]),
        ("highest_g0 in 0.5..2", [0, 1]),  # half-open
        ("plateaus >= 1", [0, 1, 4, 5]),
        ("plateaus == 0", [2, 3, 6]),
        ("plateaus(1e-5..1e-3) >= 1", [0, 1, 4, 5]),
        ("plateaus(1e-5..1e-3) == 2", []),
        ("plateaus(1e-4.., molecule) == 2", [4]),
        ("plateaus(metal) == 1", [0, 4]),
        ("plateaus(1e-5..1e-3, 0.2..) >= 1", [4]),
        ("longest_plateau_nm(..1e-3) > 0.3", [0, 4, 5]),
        ("last_plateau_nm >= 0.5", [0, 4, 5]),
        ("not (last_plateau_nm >= 0.5)", [1]),
        ("last_plateau_g0 in 1e-5..5e-5", [5]),
        ('molecule == "amine"', [0, 2, 5]),
        ('molecule != "amine"', [1, 4, 6]),  # the empty text is unknown
        ('molecule in ["thiol", "amine"]', [0, 1, 2, 4, 5, 6]),
        ('molecule contains "thi"', [1, 4, 6]),
        ('column("molecule") == "thiol"', [1, 4, 6]),
        ("good", [0, 1, 3, 4, 6]),
        ("salt in [1, 3]", [0, 2]),
        ("trace in 2..4", [2, 3]),
        ("place >= 0.5", [4, 5, 6]),
        ("hours < 0.01", [0, 1, 2]),
        ("time_second > hours", [1, 2, 4, 5, 6]),
        ('direction == "opening"', [0, 1, 2, 3, 4, 5, 6]),
        ('file == "memory"', [0, 1, 2, 3, 4, 5, 6]),
        ("has_phase(pull)", [0, 1, 2, 3, 4, 5, 6]),
        ("samples == 20", [0, 1, 2, 3, 4, 5, 6]),
    ],
)
def test_rules_keep_the_right_traces(rule, kept):
    assert np.flatnonzero(chosen(rule).kept).tolist() == kept


def test_reasons_name_the_first_rule_and_the_table_counts_alone_and_in_sequence():
    selection = chosen(["rupture_found", '"bright": highest_g0 >= 0.8', "off plateaus > 100"])
    assert selection.reason.tolist() == [
        "bright", "", "bright", "rupture_found", "", "bright", "rupture_found", "closing trace",
    ]  # fmt: skip
    assert selection.steps.rule.tolist() == ["direction is opening", "rupture_found", "bright"]
    assert selection.steps.dropped_alone.tolist() == [1, 2, 3]
    assert selection.steps.dropped_in_sequence.tolist() == [1, 2, 3]
    assert selection.steps.left.tolist() == [7, 5, 2]


def test_order_moves_reasons_not_the_result():
    rules = ["rupture_found", "highest_g0 < 3"]
    first, second = chosen(rules), chosen(rules[::-1])
    assert np.array_equal(first.kept, second.kept)
    assert first.steps.dropped_alone.tolist() == [1, 2, 3]
    assert first.steps.dropped_in_sequence.tolist() == [1, 2, 2]
    assert second.steps.dropped_alone.tolist() == [1, 3, 2]
    assert second.steps.dropped_in_sequence.tolist() == [1, 3, 1]


def test_verdicts_by_hand_win_over_rules_and_not_over_direction_or_removal():
    ids = some_traces().identities()
    decisions = Decisions().with_verdict([ids[3], ids[7]], True).with_verdict([ids[0]], False, "sparks")
    selection = chosen("rupture_found", decisions)
    assert selection.kept.tolist() == [False, True, True, True, True, True, False, False]
    assert selection.reason[0] == "rejected by hand: sparks"
    assert selection.reason[7] == "closing trace"
    removed = decisions.with_removed(RemovedRange("", 40, 60, "second", "drop dried"))
    selection = chosen("rupture_found", removed)
    assert selection.reason[4] == selection.reason[5] == "range removed: drop dried"
    back = removed.with_restored(*removed.removed_ranges)
    assert back.key() == decisions.key()


def test_removed_recordings_and_ranges_of_samples():
    traces = some_traces()
    sha256 = traces.sources[0].sha256
    selection = chosen([], Decisions().with_removed(sha256))
    assert not selection.kept.any() and selection.reason[0] == "recording removed: memory"
    selection = chosen([], Decisions().with_removed(RemovedRange(sha256, 20, 60), RemovedRange("another", 0, 1e9)))
    assert np.flatnonzero(~selection.kept).tolist() == [1, 2, 7]


def test_events_count_from_their_trace_on():
    ids = some_traces().identities()
    decisions = Decisions().with_event(Event(ids[2], "new tip")).with_event(Event(ids[5], "new tip"))
    assert np.flatnonzero(chosen('traces_since("new tip") <= 1', decisions).kept).tolist() == [2, 3, 5, 6]
    assert np.flatnonzero(chosen('seconds_since("new tip") >= 20', decisions).kept).tolist() == [4]
    assert np.flatnonzero(chosen('not (traces_since("new tip") < 2)', decisions).kept).tolist() == [4]


def test_groups_and_what_no_trace_has():
    ids = some_traces().identities()
    decisions = Decisions().with_group("odd", [ids[1], ids[3], "gone|x|0|opening"]).with_group("first", ids[:2])
    selection = chosen('not in_group("odd")', decisions)
    assert np.flatnonzero(selection.kept).tolist() == [0, 2, 4, 5, 6]
    assert selection.group.tolist()[:4] == ["first", "first;odd", "", "odd"]
    assert selection.unmatched == ("gone|x|0|opening",)


def test_damaged_traces_are_dropped_with_that_reason():
    damaged = np.zeros(TRACES, bool)
    damaged[2] = True
    selection = chosen([], traces=some_traces(damaged=damaged))
    assert selection.reason[2] == "samples damaged in the study file"


@pytest.mark.parametrize(
    ("rule", "column", "words"),
    [
        ("higest_g0 > 1", 1, "did you mean 'highest_g0'"),
        ("rupture_found and molecul == 'a'", 19, "did you mean 'molecule'"),
        ("plateaus(1e-5..1e-3, molecul) >= 1", 22, "did you mean 'molecule'"),
        ("highest_g0 > 'x'", 14, "number is compared with a text"),
        ("molecule > 3", 12, "text is compared with a number"),
        ("molecule > 'a'", 12, "cannot be compared with >"),
        ("highest_g0", 1, "not true or false"),
        ("rupture_found > 1", 17, "truth"),
        ("molecule in 1..2", 1, "a range needs a number"),
        ("salt contains 'a'", 1, "only texts"),
        ("molecule in [1, 2]", 14, "is a text"),
        ("salt(3) > 1", 1, "takes no arguments"),
        ("plateaus('a') > 1", 10, "does not take this"),
        ("plateaus(1..2, 3..4, 5..6) > 1", 22, "does not take this"),
        ("highest_g0(1..2) > 1", 12, "does not take this"),
        ("has_phase", 1, "needs something in parentheses"),
        ("in_group(5)", 10, "does not take this"),
        ("known(3)", 1, "takes the name of one quantity"),
        ("known(highst_g0)", 7, "did you mean 'highest_g0'"),
        ("column('molecul') == 'a'", 1, "did you mean 'molecule'"),
        ("1 < 2", 1, "compares no quantity"),
        ("in_group('god')", 10, "did you mean 'good'"),
        ("traces_since('newtip') > 1", 14, "did you mean 'new tip'"),
    ],
)
def test_errors_point_at_the_word_and_propose(rule, column, words):
    ids = some_traces().identities()
    decisions = Decisions().with_group("good", ids[:1]).with_event(Event(ids[0], "new tip"))
    for check in (
        lambda: chosen(rule, decisions),
        lambda: check_rules(some_traces(), SelectionSettings(rules=[rule]), decisions),
    ):
        with pytest.raises(RecipeError) as caught:
            check()
        assert f"column {column}:" in str(caught.value) and words in str(caught.value)


def test_a_group_that_nobody_made_yet_has_no_members():
    assert chosen('not in_group("odd")').kept.sum() == 7
    assert chosen('in_group("odd")').kept.sum() == 0


def test_no_traces_and_no_rules():
    selection = chosen([])
    assert selection.kept.sum() == 7 and selection.steps.left.tolist() == [7]
    none = np.empty(0, int)
    settings, plateaus = SelectionSettings(rules=["rupture_found"]), some_plateaus().take(none)
    empty = select(some_traces().take(none), settings, some_measures().take(none), plateaus, Decisions(), "opening")
    assert len(empty.kept) == 0 and len(empty.reason) == 0


def test_inputs_are_not_written_to():
    traces, measures, plateaus = some_traces(), some_measures(), some_plateaus()
    for column in (*traces.table.values(), *measures.columns().values(), *plateaus.columns().values()):
        column.flags.writeable = False
    select(
        traces, SelectionSettings(rules=["plateaus > 0 and highest_g0 > 1"]), measures, plateaus, Decisions(), "opening"
    )


# -- against an evaluator that goes trace by trace through Kleene's tables -----------------------------------------

_ATOMS = ["highest_g0 > 1", "rupture_found", "plateaus >= 1", 'molecule == "amine"', "last_plateau_nm > 0.4"]


def _atom(text, row):
    measures, plateaus, traces = some_measures(), some_plateaus(), some_traces()
    if text == "rupture_found":
        return bool(measures.rupture_found[row])
    if text == "highest_g0 > 1":
        value = measures.highest_g0[row]
        return None if np.isnan(value) else bool(value > 1)
    if text == "plateaus >= 1":
        return bool((plateaus.trace == row).any())
    if text == 'molecule == "amine"':
        return None if traces.table["molecule"][row] == "" else traces.table["molecule"][row] == "amine"
    lengths = plateaus.length_nm[(plateaus.trace == row) & (plateaus.number == 1)]
    return None if len(lengths) == 0 else bool(lengths[0] > 0.4)


def _slow(tree, row):
    if isinstance(tree, str):
        return _atom(tree, row)
    kind, *parts = tree
    values = [_slow(part, row) for part in parts]
    if kind == "not":
        return None if values[0] is None else not values[0]
    decisive = kind == "or"
    if decisive in values:
        return decisive
    return None if None in values else not decisive


def _written(tree):
    if isinstance(tree, str):
        return tree
    kind, *parts = tree
    return f"not ({_written(parts[0])})" if kind == "not" else "(" + f") {kind} (".join(map(_written, parts)) + ")"


_trees = st.recursive(
    st.sampled_from(_ATOMS),
    lambda parts: st.one_of(st.tuples(st.just("not"), parts), st.tuples(st.sampled_from(["and", "or"]), parts, parts)),
    max_leaves=6,
)


@settings(deadline=None, max_examples=60)
@given(_trees)
def test_three_valued_logic_equals_the_tables(tree):
    kept = chosen(_written(tree)).kept
    expected = [_slow(tree, row) is True for row in range(7)]
    assert kept.tolist() == [*expected, False]


def test_source_names_come_from_the_recording():
    traces = some_traces()
    named = type(traces)(**{**traces.__dict__, "sources": (Source(traces.sources[0].sha256, "night 3/blank.h5"),)})
    assert chosen('file contains "blank"', traces=named).kept.sum() == 7
