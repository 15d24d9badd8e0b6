import h5py
import numpy as np
import pytest
from study_samples import assert_same_traces, plain_traces, rich_traces, some_decisions, some_study

from meseta.analysis import Analysis
from meseta.errors import CallError, OutputError, StudyError
from meseta.recipe import Recipe
from meseta.study import Study, is_study, read, write_study
from meseta.work import Work


@pytest.mark.parametrize("traces", [plain_traces(), rich_traces()], ids=["plain", "rich"])
def test_everything_comes_back_to_the_last_bit(tmp_path, traces):
    path = tmp_path / "study.h5"
    recipe = Recipe.preset("metal").with_settings(["plateaus.minimum_length_nm=0.07"])
    write_study(path, Analysis(traces, recipe, some_decisions(traces)))
    with Study.open(path) as study:
        assert_same_traces(traces, study.traces())
        assert study.recipe == recipe
        assert study.decisions == some_decisions(traces)
        assert study.check() == [] and study.damage == () and study.recovered == ()


def test_blocks_are_read_from_within_chunks(tmp_path):
    traces = rich_traces()
    write_study(tmp_path / "s.h5", Analysis(traces))
    back = read(tmp_path / "s.h5")
    for work in (Work(block_samples=1), Work(block_samples=30_000), Work(block_samples=10**9)):
        parts = [block.conductance for block in back.each_block(work)]
        assert np.concatenate(parts).tobytes() == traces.conductance.tobytes()
    samples = back.channels["conductance"].samples
    rng = np.random.default_rng(5)
    for start, stop in np.sort(rng.integers(0, traces.samples + 1, (200, 2)), axis=1):
        assert samples.read(start, stop).tobytes() == traces.conductance[start:stop].tobytes()


def test_results_have_the_same_keys(tmp_path):
    analysis = Analysis(plain_traces(), Recipe(), some_decisions(plain_traces()))
    write_study(tmp_path / "s.h5", analysis)
    back = Study.open(tmp_path / "s.h5", read_only=True).analysis()
    assert [back.key(step) for step in ("selection", "peaks")] == [
        analysis.key(step) for step in ("selection", "peaks")
    ]


def test_computed_tables_are_kept_with_their_keys(tmp_path):
    analysis = Analysis(plain_traces(), Recipe(), some_decisions(plain_traces()))
    plateaus, selection = analysis.plateaus(Work(threads=1)), analysis.selection(Work(threads=1))
    write_study(tmp_path / "s.h5", analysis)
    with Study.open(tmp_path / "s.h5") as study:
        results = study.results()
        assert set(results) == {"plateaus", "measures", "selection"}  # what was not computed is not there
        for name, column in plateaus.columns().items():
            kept = results["plateaus"].columns[name]
            assert np.array_equal(kept, column, equal_nan=column.dtype.kind == "f")
        assert results["selection"].columns["reason"].tolist() == selection.reason.tolist()
        assert results["plateaus"].key == study.analysis().key("plateaus")
        other = study.recipe.with_settings(["plateaus.minimum_length_nm=0.33"])
        assert results["plateaus"].key != study.analysis(other).key("plateaus")


def test_traces_outlive_the_study_and_are_read_only(tmp_path):
    with some_study(tmp_path / "s.h5") as study:
        traces = study.traces()
    (tmp_path / "s.h5").unlink()
    values = traces.trace_conductance(3)
    assert values.tobytes() == plain_traces().trace_conductance(3).tobytes()
    with pytest.raises(ValueError, match="read-only"):
        values[0] = 1


def test_any_hdf5_tool_can_read_it(tmp_path):
    some_study(tmp_path / "s.h5").close()
    with h5py.File(tmp_path / "s.h5", "r") as root:
        assert root.attrs["format"].decode() == "meseta study"
        assert np.array_equal(root["traces/channels/conductance"][:], plain_traces().conductance)
        assert root["traces/channels/conductance"].attrs["unit"].decode() == "G0"
        assert root["decisions/identity"].asstr()[0].endswith("|opening")
        assert "[plateaus]" in root["recipe"].asstr()[0]


def test_two_studies_of_the_same_have_their_own_identity_and_write_over_nothing(tmp_path):
    first, second = some_study(tmp_path / "a.h5"), some_study(tmp_path / "b.h5", fresh=True)
    assert first._content.identity != second._content.identity
    with pytest.raises(CallError, match="exists already"):
        Study.create(tmp_path / "a.h5", [tmp_path / "b.h5"])


def test_no_folder_leaves_nothing_behind(tmp_path):
    with pytest.raises(OutputError, match="cannot be made"):
        write_study(tmp_path / "missing" / "s.h5", Analysis(plain_traces()))
    assert list(tmp_path.iterdir()) == []


def test_a_cancelled_write_leaves_nothing_behind(tmp_path):
    work = Work()

    def stop(progress):
        if progress.done > 0:
            work.cancel.set()

    with pytest.raises(Exception, match="stopped on request"):
        write_study(tmp_path / "s.h5", Analysis(rich_traces()), Work(report=stop, cancel=work.cancel))
    assert list(tmp_path.iterdir()) == []


def test_what_is_no_study_is_told_apart(tmp_path):
    (tmp_path / "text.h5").write_text("no")
    (tmp_path / "empty.h5").touch()
    with h5py.File(tmp_path / "other.h5", "w") as file:
        file["x"] = 1
    for name in ("text.h5", "empty.h5", "other.h5", "missing.h5"):
        assert not is_study(tmp_path / name)
        with pytest.raises(StudyError):
            Study.open(tmp_path / name)
    assert not is_study(tmp_path)


def test_differing_versions_are_listed(tmp_path):
    with some_study(tmp_path / "s.h5") as study:
        assert study.version_differences() == []
    with h5py.File(tmp_path / "s.h5", "r+") as root:
        text = root["versions"].asstr()[0].replace('"numpy": "', '"numpy": "1')
        del root["versions"]
        root.create_dataset("versions", data=np.array([text.encode()]), chunks=(1,))
    differences = Study.open(tmp_path / "s.h5", read_only=True).version_differences()
    assert len(differences) == 1 and differences[0].startswith("numpy 1")
