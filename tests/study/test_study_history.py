import json
import zlib

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from study_samples import plain_traces, some_study

from meseta.errors import CallError, RecipeError, StudyError
from meseta.selection import Decisions, Event, RemovedRange
from meseta.study import Study
from meseta.study.history import Entry, History
from meseta.study.state import State, applied, difference, words

IDS = plain_traces().identities()


def test_every_change_is_an_entry_that_reads_like_a_notebook(tmp_path):
    with some_study(tmp_path / "s.h5") as study:
        study.reject(IDS[4:6], "drift")
        study.change(recipe=study.recipe.with_settings(["calibration.series_resistance_ohm=100"]))
        study.change(recipe=study.recipe.with_settings(["plateaus.minimum_length_nm=0.2"]), text="shorter is noise")
        study.name("for the figure")
        study.undo()
        study.note("asked K.")
        text = study.history.text()
    kinds = [entry.kind for entry in study.history.entries]
    assert kinds == ["begin", "decision", "calibration", "recipe", "name", "undo", "note"]
    assert "rejected by hand: drift (2)" in text
    assert "Calibration: calibration.series_resistance_ohm: 0.0 -> 100.0" in text or "not set -> 100.0" in text
    assert (
        "Recipe: shorter is noise" in text and "Undone: #3 shorter is noise" in text and "Named: for the figure" in text
    )
    assert all(entry.version and entry.when.endswith("+00:00") for entry in study.history.entries)


def test_undo_redo_names_and_return(tmp_path):
    with some_study(tmp_path / "s.h5") as study:
        start = study.decisions
        study.reject(IDS[7:8])
        one = study.decisions
        study.name("one")
        study.reject(IDS[8:9])
        two = study.decisions
        study.undo()
        assert study.decisions == one
        study.undo()
        assert study.decisions == start
        assert study.undo() is None
        study.redo()
        assert study.decisions == one
        study.redo()
        assert study.decisions == two
        assert study.redo() is None
        study.undo()
        study.reject(IDS[9:10])  # another branch; the first is not lost
        study.return_to("one")
        assert study.decisions == one
        study.return_to(3)
        assert study.decisions == two
        with pytest.raises(CallError, match="did you mean 'one'"):
            study.return_to("onee")
        with pytest.raises(CallError, match="entries are 0 to"):
            study.return_to(99)
        assert study.change() is None


def test_saved_history_is_opened_again(tmp_path):
    with some_study(tmp_path / "s.h5") as study:
        for number in range(5):
            study.reject(IDS[number : number + 2], f"reason {number}")
            study.save()
        study.undo()
        study.save()
        entries, decisions = study.history.entries, study.decisions
    assert not (tmp_path / "s.h5.journal").exists()
    with Study.open(tmp_path / "s.h5") as study:
        assert study.history.entries == entries and study.decisions == decisions and study.recovered == ()


# -- any row of changes, undos and returns, against a model that keeps every state ------------------------------------

_steps = st.lists(
    st.one_of(
        st.tuples(st.just("reject"), st.integers(0, 11), st.sampled_from(["", "a", "b"])),
        st.tuples(st.just("keep"), st.integers(0, 11), st.just("")),
        st.tuples(st.just("free"), st.integers(0, 11), st.just("")),
        st.tuples(st.just("group"), st.integers(0, 11), st.sampled_from(["x", "y"])),
        st.tuples(st.just("ungroup"), st.just(0), st.sampled_from(["x", "y"])),
        st.tuples(st.just("event"), st.integers(0, 11), st.sampled_from(["tip", "drop"])),
        st.tuples(st.just("remove"), st.integers(0, 3), st.just("")),
        st.tuples(st.just("restore"), st.integers(0, 3), st.just("")),
        st.tuples(st.just("recipe"), st.integers(1, 5), st.just("")),
        st.tuples(st.sampled_from(["undo", "redo"]), st.just(0), st.just("")),
        st.tuples(st.just("return"), st.integers(0, 30), st.just("")),
    ),
    max_size=25,
)


def _after(state, step):
    kind, number, text = step
    decisions = state.decisions
    some = IDS[number : number + 2]
    if kind == "recipe":
        return State(state.recipe.with_settings([f"plateaus.minimum_length_nm=0.{number}"]), decisions)
    changed = {
        "reject": lambda: decisions.with_verdict(some, False, text),
        "keep": lambda: decisions.with_verdict(some, True),
        "free": lambda: decisions.without_verdict(some),
        "group": lambda: decisions.with_group(text, some, f"#{number:06d}"),
        "ungroup": lambda: decisions.without_group(text),
        "event": lambda: decisions.with_event(Event(IDS[number], text)),
        "remove": lambda: decisions.with_removed(str(number), RemovedRange("", number, number + 1)),
        "restore": lambda: decisions.with_restored(str(number), RemovedRange("", number, number + 1)),
    }[kind]()
    return State(state.recipe, changed)


def _plain(state):
    """Return a state without the order in which equal things were added."""
    plain = Decisions.plain(state.decisions)
    plain["events"] = sorted({tuple(event.items()) for event in plain["events"]})
    plain["removed_ranges"] = sorted(tuple(part.items()) for part in plain["removed_ranges"])
    return state.recipe.text(), json.dumps(plain, sort_keys=True)


@settings(deadline=None, max_examples=80)
@given(_steps)
def test_history_equals_a_model_that_keeps_every_state(steps):
    history, state = History.begun("x"), State()
    kept = {0: state}
    for step in steps:
        if step[0] == "undo":
            target = history.undone()
        elif step[0] == "redo":
            target = history.redone()
        elif step[0] == "return":
            target = history.find(min(step[1], len(history.entries) - 1))
        else:
            after = _after(state, step)
            edits = difference(state, after)
            assert (edits == []) == (_plain(after) == _plain(state))
            if not edits:
                continue
            assert words(edits)[1]
            entry = Entry.parse(json.loads(json.dumps(history.change("decision", "", edits).plain())))
            history, state = history.with_entry(entry), after
            kept[entry.number] = state
            continue
        if target is None or target == history.state:
            continue
        state = history.moved(state, target)
        history = history.with_entry(history.move(step[0], "", target))
        assert _plain(state) == _plain(kept[target])


@settings(deadline=None, max_examples=60)
@given(_steps, _steps)
def test_edits_lead_from_one_state_to_the_other_and_back(first, second):
    def built(steps):
        state = State()
        for step in steps:
            if step[0] not in ("undo", "redo", "return"):
                state = _after(state, step)
        return state

    before, after = built(first), built(second)
    edits = difference(before, after)
    assert _plain(applied(before, edits)) == _plain(after)
    assert _plain(applied(after, edits, backwards=True)) == _plain(before)


# -- the journal --------------------------------------------------------------------------------------------------


def _some_unsaved(path):
    with some_study(path) as study:
        for number in range(4):
            study.reject(IDS[number + 6 : number + 7], f"reason {number}")
        return study.decisions, study.history.entries


def test_what_was_not_saved_is_recovered_and_can_be_discarded(tmp_path):
    decisions, entries = _some_unsaved(tmp_path / "s.h5")
    with Study.open(tmp_path / "s.h5") as study:
        assert study.decisions == decisions and study.history.entries == entries
        assert [entry.number for entry in study.recovered] == [1, 2, 3, 4]
        study.discard_recovered()
        assert len(study.decisions.verdicts) == 3
        study.return_to(4)
        assert study.decisions == decisions


def test_a_journal_cut_anywhere_gives_what_was_whole(tmp_path):
    _some_unsaved(tmp_path / "s.h5")
    journal = tmp_path / "s.h5.journal"
    whole = journal.read_bytes()
    ends = [place + 1 for place, byte in enumerate(whole) if byte == ord("\n")]
    for length in {0, 1, *ends, *(end - 1 for end in ends), *(end + 7 for end in ends[:-1])}:
        journal.write_bytes(whole[:length])
        with Study.open(tmp_path / "s.h5") as study:
            assert len(study.recovered) == max(sum(end <= length for end in ends) - 1, 0)
            assert study.damage == () and not study.read_only
            study.reject(IDS[11:12], "after")
        with Study.open(tmp_path / "s.h5", read_only=True) as study:
            assert study.recovered[-1].text == "rejected by hand: after"


@settings(deadline=None, max_examples=25, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.data())
def test_a_flipped_bit_in_the_journal_never_passes_silently(tmp_path, data):
    _some_unsaved(tmp_path / "s.h5")
    journal = tmp_path / "s.h5.journal"
    body = bytearray(journal.read_bytes())
    body[data.draw(st.integers(0, len(body) - 1))] ^= 1 << data.draw(st.integers(0, 7))
    journal.write_bytes(body)
    with Study.open(tmp_path / "s.h5", read_only=True) as study:
        recovered = len(study.recovered)
        assert [entry.text for entry in study.recovered] == [f"rejected by hand: reason {n}" for n in range(recovered)]
        assert recovered == 4 or study.damage or recovered == body.count(b"\n") - 1
        if study.damage:
            with pytest.raises(StudyError, match="journal"):
                _ = study.decisions
    for left in tmp_path.iterdir():
        left.unlink()


def test_a_damaged_journal_is_set_aside_not_lost(tmp_path):
    _some_unsaved(tmp_path / "s.h5")
    journal = tmp_path / "s.h5.journal"
    lines = journal.read_bytes().splitlines(keepends=True)
    lines[3] = lines[3].replace(b"reason 2", b"reason X")
    journal.write_bytes(b"".join(lines))
    study = Study.open(tmp_path / "s.h5")
    assert study.damage == ("the journal: line 4 is damaged",) and len(study.recovered) == 2
    study.close()
    assert (tmp_path / "s.h5.journal-aside-1").read_bytes() == b"".join(lines)


def test_the_journal_of_another_study_is_not_applied(tmp_path):
    _some_unsaved(tmp_path / "s.h5")
    some_study(tmp_path / "other.h5", fresh=True).close()
    (tmp_path / "s.h5.journal").rename(tmp_path / "other.h5.journal")
    study = Study.open(tmp_path / "other.h5")
    assert study.recovered == () and "another study" in study.damage[0]
    study.close()


def test_a_journal_with_a_right_checksum_and_wrong_content_is_refused(tmp_path):
    _some_unsaved(tmp_path / "s.h5")
    journal = tmp_path / "s.h5.journal"
    for text in (
        b"[]",
        b'{"number": 5}',
        b'{"number":5,"when":"","version":"","kind":"","text":"","parent":9,"state":5,"edits":[]}',
    ):
        with journal.open("ab") as file:
            before = file.tell()
            file.write(b"%08x %s\n" % (zlib.crc32(text), text))
        study = Study.open(tmp_path / "s.h5", read_only=True)
        assert len(study.recovered) == 4 and study.damage
        with journal.open("r+b") as file:
            file.truncate(before)


def test_a_recipe_that_is_no_recipe_changes_nothing(tmp_path):
    with some_study(tmp_path / "s.h5") as study:
        with pytest.raises(RecipeError):
            study.change(recipe=study.recipe.with_settings(["plateaus.nonsense=1"]))
        assert len(study.history.entries) == 1
