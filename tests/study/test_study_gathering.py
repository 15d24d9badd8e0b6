"""Recordings in the study: copied or linked, added, calibrated anew, moved."""

import threading

import h5py
import numpy as np
import pytest
from study_samples import assert_same_traces, write_recording

from meseta import intake
from meseta.errors import InputError, StudyError
from meseta.recipe import Recipe
from meseta.selection import Decisions
from meseta.study import Study, gather, is_study, read, write_study
from meseta.work import Work

LINKED = Recipe().with_settings(["study.copy_below_megabyte=0"])


@pytest.fixture
def night(tmp_path):
    """Return a folder of three recordings."""
    folder = tmp_path / "night"
    folder.mkdir()
    for number in range(3):
        write_recording(folder / f"part{number}.h5", seed=number, traces=3 + number)
    return folder


def _same_but_notes(first, second):
    assert_same_traces(first, second.__class__(**{**second.__dict__, "notes": first.notes}))


def test_a_gathered_study_has_the_traces_that_reading_gives(tmp_path, night):
    answer, bad = gather([night], tmp_path / "s.h5")
    assert bad == [] and answer["recordings_added"] == 3 and answer["traces"] == 12
    _same_but_notes(intake.read(night), read(tmp_path / "s.h5"))
    with Study.open(tmp_path / "s.h5") as study:
        assert set(study.sources.values()) == {"copied"}
        assert study.check() == []


def test_recordings_added_one_by_one_equal_all_at_once(tmp_path, night):
    files = sorted(night.iterdir())
    for file in files:
        gather([file], tmp_path / "s.h5")
    answer, _ = gather(files, tmp_path / "s.h5")
    assert answer["recordings_added"] == 0 and answer["already_there"] == 3
    _same_but_notes(intake.read(files), read(tmp_path / "s.h5"))
    with Study.open(tmp_path / "s.h5") as study:
        assert [entry.kind for entry in study.history.entries] == ["begin", "import", "import"]
        study.undo()  # taking an import back removes its recordings, in one action
        assert study.decisions.removed_sources == {intake.open_recording(files[2]).source.sha256}
        study.redo()
        assert not study.decisions.removed_sources


def test_bad_files_are_listed_and_leave_nothing(tmp_path, night):
    (night / "text.csv").write_text("nothing here\n")
    answer, bad = gather([night], tmp_path / "s.h5")
    assert answer["recordings_added"] == 3 and len(bad) == 1 and "text.csv" in bad[0].where
    (tmp_path / "bad").mkdir()
    (tmp_path / "bad" / "x.csv").write_text("nothing\n")
    with pytest.raises(InputError):
        gather([tmp_path / "bad"], tmp_path / "t.h5")
    assert not (tmp_path / "t.h5").exists()
    with pytest.raises(StudyError, match="is not a Meseta study"):
        gather([night], night / "part0.h5")


@pytest.mark.parametrize("recipe", [Recipe(), LINKED], ids=["copied", "linked"])
def test_a_corrected_gain_keeps_every_decision(tmp_path, night, recipe):
    """A week of decisions, then the gain turns out to be wrong by a factor of two."""
    study = Study.create(tmp_path / "s.h5", night, recipe)
    before = study.traces()
    identities = before.identities()
    study.reject(identities[::3], "noisy")
    study.change(decisions=study.decisions.with_group("good", identities[1::3]))
    decisions = study.decisions
    corrected = recipe.with_settings(["calibration.gain_volt_per_ampere=2e6"])
    study.change(recipe=corrected)
    after = study.traces()
    assert study.decisions == decisions and decisions.identities() <= set(after.identities())
    assert np.allclose(after.conductance, before.conductance / 2, rtol=1e-6)
    _same_but_notes(intake.read(night, corrected), after)
    assert study.history.entries[-1].kind == "calibration"
    study.undo()
    _same_but_notes(before, study.traces())
    study.save()
    study.close()


@pytest.mark.parametrize("recipe", [Recipe(), LINKED], ids=["copied", "linked"])
def test_the_offset_from_the_floor_is_that_of_all_recordings_however_they_are_batched(tmp_path, monkeypatch, recipe):
    """Six recordings whose offset drifts, in one batch or in six, with a bad file among them: the same to the bit."""
    rng, folder = np.random.default_rng(1), tmp_path / "drifting"
    folder.mkdir()
    for number in range(6):
        drift = 0.02 + 0.01 * (number + np.linspace(0, 1, 20))[:, None]
        rows = np.concatenate([np.full((20, 100), 0.5), np.zeros((20, 300))], 1) + drift
        with h5py.File(folder / f"part{number}.h5", "w") as file:
            file["amplifier"] = rows + 1e-3 * rng.normal(size=rows.shape)
            file["amplifier"].attrs["unit"] = "V"
            file.attrs.update(bias_volt=0.1, gain_volt_per_ampere=1e6, nm_per_sample=0.01)
    (folder / "part2b.h5").write_bytes(b"no recording")
    recipe = recipe.with_settings(["calibration.offset_from_floor=true", "intake.layout=rows"])
    whole = intake.read(folder, recipe)
    monkeypatch.setattr("meseta.study.gathering.BATCH_SAMPLES", 8000)
    with Study.create(tmp_path / "s.h5", folder, recipe) as study:
        np.testing.assert_array_equal(study.traces().conductance, whole.conductance)
        assert study.traces().notes["floor_offset"] == whole.notes["floor_offset"]
        assert study.traces().notes["floor_offset"]["traces"] == 120


@pytest.mark.parametrize("recipe", [Recipe(), LINKED], ids=["copied", "linked"])
def test_a_changed_error_of_a_constant_moves_the_interval_and_no_trace(tmp_path, night, recipe):
    """3 % of gain is 3 % of every position; the recordings are away, so that nothing can have been made anew."""
    recipe = recipe.with_values("peaks", peaks=[{"position_g0": 1.0, "width": 0.3}], axis="logarithmic")
    recipe = recipe.with_settings(["resampling.replicates=40", "histogram.region=phase"])
    study = Study.create(tmp_path / "s.h5", night, recipe)
    night.rename(tmp_path / "elsewhere")
    before, fit = study.traces(), study.analysis().result("peaks")
    study.change(recipe=recipe.with_settings(["calibration.gain_relative_error=0.03"]))
    after, doubted = study.traces(), study.analysis().result("peaks")
    assert (after.key, after.notes) == (before.key, before.notes) and after is before
    assert len(fit.table.position_g0) > 0 and np.all(fit.table.position_calibration_g0 == 0)
    np.testing.assert_allclose(doubted.table.position_calibration_g0, 0.03 * doubted.table.position_g0)
    assert np.all(doubted.table.position_systematic_g0 > fit.table.position_systematic_g0)
    study.save()
    study.close()
    with Study.open(tmp_path / "s.h5") as again:
        assert again.traces().key == before.key


def test_a_study_in_which_errors_still_counted_opens_without_its_recordings(tmp_path, night):
    recipe = LINKED.with_settings(["calibration.gain_relative_error=0.03"])
    Study.create(tmp_path / "s.h5", night, recipe).close()
    with h5py.File(tmp_path / "s.h5", "a") as file:
        file["traces"].attrs["recipe_key"] = recipe.key(("intake", "calibration", "cutting"), with_errors=True)
    night.rename(tmp_path / "elsewhere")
    with Study.open(tmp_path / "s.h5") as study:
        assert len(study.traces()) == 12


def test_decisions_without_a_trace_are_listed_never_moved(tmp_path, night):
    study = Study.create(tmp_path / "s.h5", night)
    identities = study.traces().identities()
    study.reject([identities[0], "0" * 64 + "|amplifier|17|opening"])
    unmatched = study.analysis().selection(Work(threads=1)).unmatched
    study.close()
    assert unmatched == ("0" * 64 + "|amplifier|17|opening",)


def test_linked_recordings_are_found_only_where_the_user_points(tmp_path, night):
    Study.create(tmp_path / "s.h5", night, LINKED).close()
    corrected = LINKED.with_settings(["calibration.gain_volt_per_ampere=2e6"])
    moved = tmp_path / "elsewhere"
    night.rename(moved)
    (tmp_path / "s.h5").rename(moved.parent / "moved.h5")
    with Study.open(tmp_path / "moved.h5") as study:
        assert set(study.sources.values()) == {"linked"}
        assert len(study.traces()) == 12  # what was made of them is there
        study.change(recipe=corrected)
        with pytest.raises(StudyError, match=r"recording 'part0.h5' is linked, not copied, and not found"):
            study.traces()
        study.point_to(moved)
        _same_but_notes(intake.read(moved, corrected), study.traces())


def test_a_recording_that_was_changed_is_not_taken_for_the_linked_one(tmp_path, night):
    Study.create(tmp_path / "s.h5", night, LINKED).close()
    write_recording(night / "part1.h5", seed=99, traces=4)
    study = Study.open(tmp_path / "s.h5", read_only=True, folders=night)
    with pytest.raises(StudyError, match="other checksum"):
        study.traces(recipe=LINKED.with_settings(["calibration.gain_volt_per_ampere=2e6"]))


def test_a_link_cannot_lead_out_of_the_folder(tmp_path, night):
    from meseta.study.recordings import find_linked
    from meseta.traces import Source

    target = night / "part0.h5"
    known = intake.open_recording(target).source
    for name in ("../night/part0.h5", str(target), "..\\night\\part0.h5"):
        with pytest.raises(StudyError, match="not found"):
            find_linked(Source(known.sha256, name, known.size_byte), [tmp_path / "night"])
    assert find_linked(known, [tmp_path, night]) == target


def test_a_run_from_recordings_keeps_them_and_one_from_a_study_its_history(tmp_path, night):
    recipe = Recipe()
    traces = read(night, recipe)
    from meseta.analysis import Analysis

    write_study(tmp_path / "a.h5", Analysis(traces, recipe), files=[night])
    with Study.open(tmp_path / "a.h5") as study:
        assert set(study.sources.values()) == {"copied"}
        assert_same_traces(traces, study.traces())
        study.reject(traces.identities()[:2], "sparks")
        study.save()
        analysis = study.analysis(recipe.with_settings(["plateaus.minimum_length_nm=0.3"]))
    write_study(tmp_path / "b.h5", analysis, files=[tmp_path / "a.h5"])
    with Study.open(tmp_path / "b.h5") as study:
        assert [entry.kind for entry in study.history.entries] == ["begin", "decision", "recipe", "note"]
        assert len(study.decisions.verdicts) == 2
        assert set(study.sources.values()) == {"copied"} and study.check() == []
        study.undo()
        assert study.recipe == recipe


def test_another_unit_of_the_drive_is_refused_and_the_study_stays_as_it_was(tmp_path, night):
    gather([night / "part0.h5"], tmp_path / "s.h5")
    rows = np.stack([np.arange(300) * 1e-4, np.random.default_rng(1).lognormal(size=300)], 1)
    np.savetxt(night / "other.csv", rows, delimiter=",", header="time (s),conductance (G0)", comments="")
    before = (tmp_path / "s.h5").read_bytes()
    answer, bad = gather([night / "other.csv"], tmp_path / "s.h5")
    assert answer["recordings_added"] == 0 and "the drive of new traces is in s, that of the study in nm" in bad[0].what
    assert (tmp_path / "s.h5").read_bytes() == before
    with Study.open(tmp_path / "s.h5") as study:
        assert len(study.sources) == 1 and study.check() == []


def test_the_study_in_the_folder_of_its_recordings_is_not_gathered(night):
    gather([night], night / "study.h5")
    answer, bad = gather([night], night / "study.h5")
    assert answer["recordings_added"] == 0 and bad == [] and is_study(night / "study.h5")


def test_two_threads_of_decisions_lose_none(tmp_path, night):
    study = Study.create(tmp_path / "s.h5", night)
    start = threading.Barrier(2)

    def decide(word):
        start.wait()
        for number in range(10):
            study.note(f"{word} {number}")

    threads = [threading.Thread(target=decide, args=(word,)) for word in "ab"]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    study.close()
    with Study.open(tmp_path / "s.h5") as again:
        assert len(again.recovered) == 20 and again.damage == ()


def test_removed_recordings_come_back_in_one_action(tmp_path, night):
    study = Study.create(tmp_path / "s.h5", night)
    gone = [source.sha256 for source in study.sources][:2]
    study.remove(*gone)
    kept = study.analysis().selection(Work(threads=1)).kept
    assert np.flatnonzero(kept).tolist() == [7, 8, 9, 10, 11]
    study.restore(*gone)
    assert study.analysis().selection(Work(threads=1)).kept.all()
    assert study.decisions == Decisions()
    study.close()
