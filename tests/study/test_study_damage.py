"""Truncated, flipped and hostile files: nothing damaged passes silently, nothing undamaged is lost."""

import random

import h5py
import numpy as np
import pytest
from study_samples import plain_traces, rich_traces, some_decisions, some_study

from meseta.analysis import Analysis
from meseta.errors import StudyError
from meseta.recipe.selection import SelectionSettings
from meseta.segmentation import PlateauTable, TraceMeasures
from meseta.selection import select
from meseta.study import Study, read, write_study


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """Return the bytes of a study, and what it holds."""
    path = tmp_path_factory.mktemp("whole") / "s.h5"
    some_study(path).close()
    return path.read_bytes()


def _fails_or_equals(path, traces):
    """Open a damaged study; return whether damage was reported, after comparing all that was not."""
    try:
        study = Study.open(path, read_only=True)
    except StudyError as error:
        assert str(path) in str(error) and "\n" not in str(error)
        return True
    reported = bool(study.damage) or bool(study.check())
    for part, expected in (("decisions", some_decisions(traces)), ("recipe", None), ("history", None)):
        try:
            value = getattr(study, part)
        except StudyError:
            assert study.damage
        else:
            assert expected is None or value == expected
    if not any(statement.startswith(("the traces", "the list", "the recipe")) for statement in study.damage):
        held = study.traces()
        assert (held.key, held.notes, held.drive.unit) == (traces.key, traces.notes, traces.drive.unit)
        assert held.channels["conductance"].unit == "G0" and held.identities() == traces.identities()
        lost = _lost_samples(study)
        samples = held.channels["conductance"].samples
        for start in range(0, held.samples, 400):
            if not lost[start : start + 400].any():
                assert samples.read(start, start + 400).tobytes() == traces.conductance[start : start + 400].tobytes()
    return reported


def _lost_samples(study):
    lost = np.zeros(study.traces().samples, bool)
    samples = study.traces().channels["conductance"].samples
    for number in range(len(samples.places)):
        if samples.damaged(number):
            lost[slice(*samples.span(number))] = True
    return lost


@pytest.mark.parametrize("seed", range(4))
def test_flipped_bits(tmp_path, whole, seed):
    path, traces, chance = tmp_path / "s.h5", plain_traces(), random.Random(seed)
    reported = 0
    for _ in range(15):
        body = bytearray(whole)
        body[chance.randrange(len(body))] ^= 1 << chance.randrange(8)
        path.write_bytes(body)
        reported += _fails_or_equals(path, traces)
    assert reported > 0


def test_every_region_of_samples_is_covered_by_a_checksum(tmp_path, whole):
    path = tmp_path / "s.h5"
    path.write_bytes(whole)
    samples = Study.open(path, read_only=True).traces().channels["conductance"].samples
    chance = random.Random(1)
    for number, place in enumerate(samples.places.tolist()):
        body = bytearray(whole)
        start, stop = samples.span(number)
        body[place + chance.randrange((stop - start) * 4)] ^= 0x10
        path.write_bytes(body)
        study = Study.open(path, read_only=True)
        assert study.damage == () and len(study.check()) == 1
        with pytest.raises(StudyError, match=f"samples {start} to {stop} of 'conductance' are damaged"):
            study.traces().conductance.sum()


@pytest.mark.parametrize("share", [0.0, 0.001, 0.1, 0.5, 0.9, 0.999])
def test_truncated_files(tmp_path, whole, share):
    path = tmp_path / "s.h5"
    path.write_bytes(whole[: int(share * len(whole))])
    with pytest.raises(StudyError):
        Study.open(path)
    assert [one.name for one in tmp_path.iterdir()] == ["s.h5"]


def test_damaged_decisions_are_not_taken_for_none(tmp_path):
    path = tmp_path / "s.h5"
    study = some_study(path)
    study.close()
    with h5py.File(path, "r") as root:
        info = root["decisions/identity"].id.get_chunk_info(0)
    body = bytearray(path.read_bytes())
    body[info.byte_offset + 5] ^= 1
    path.write_bytes(body)
    with Study.open(path) as study:
        assert study.read_only and study.why_read_only == "the file is damaged"
        assert len(study.damage) == 1 and study.damage[0].startswith("the decisions")
        with pytest.raises(StudyError, match="the decisions"):
            _ = study.decisions
        with pytest.raises(StudyError):
            study.analysis()
        with pytest.raises(StudyError, match="cannot be changed"):
            study.save()
        assert study.traces().conductance.tobytes() == plain_traces().conductance.tobytes()
        assert study.recipe.selection.rules == ["rupture_found"]


def test_the_undamaged_rest_is_analysed_and_the_lost_traces_named(tmp_path):
    traces = rich_traces()
    path = tmp_path / "s.h5"
    write_study(path, Analysis(traces))
    samples = Study.open(path, read_only=True).traces().channels["conductance"].samples
    body = bytearray(path.read_bytes())
    body[int(samples.places[1]) + 1000] ^= 1
    path.write_bytes(body)
    back = read(path)
    lost = back.table["damaged"]
    start, stop = samples.span(1)
    touched = (traces.offsets[1:] > start) & (traces.offsets[:-1] < stop) & (traces.lengths > 0)
    assert np.array_equal(lost & (traces.lengths > 0), touched)
    assert len(back.notes["damage"]) == 1 and "samples of 'conductance' are damaged" in back.notes["damage"][0]
    assert back.key != traces.key
    for row in np.flatnonzero(~lost):
        assert back.trace_conductance(int(row)).tobytes() == traces.trace_conductance(int(row)).tobytes()
    measures = TraceMeasures(
        **{name: np.zeros(len(traces), bool if name in ("rupture_found", "reaches_floor", "reforms") else float)
           for name in TraceMeasures.__dataclass_fields__}
    )  # fmt: skip
    found = select(back, SelectionSettings(), measures, PlateauTable.empty(), some_decisions(traces), "opening")
    assert not found.kept[lost].any() and (found.reason[lost] == "samples damaged in the study file").all()


# -- nothing in a study reaches other files ----------------------------------------------------------------------------


@pytest.fixture
def hostile(tmp_path):
    """Return a function that changes a study by hand and opens it."""
    path = tmp_path / "s.h5"
    some_study(path).close()
    (tmp_path / "secret.txt").write_bytes(b"\x00\x00\x80\x3f" * 5000)
    with h5py.File(tmp_path / "other.h5", "w") as other:
        other["x"] = np.arange(4800, dtype="f4")
        other["recipe"] = np.array([b"[plateaus]\n"])

    def opened(change):
        with h5py.File(path, "r+") as root:
            change(root, tmp_path)
        return Study.open(path, read_only=True)

    return opened


def _renewed(root, name, make):
    del root[name]
    make()


def test_external_links_are_not_followed(hostile):
    def change(root, folder):
        _renewed(
            root, "recipe", lambda: root.__setitem__("recipe", h5py.ExternalLink(str(folder / "other.h5"), "/recipe"))
        )

    study = hostile(change)
    assert "'recipe' is a link" in study.damage[0]
    with pytest.raises(StudyError, match="is a link"):
        _ = study.recipe


def test_soft_links_are_not_followed(hostile):
    def change(root, _):
        _renewed(root, "recipe", lambda: root.__setitem__("recipe", h5py.SoftLink("/versions")))

    assert "'recipe' is a link" in hostile(change).damage[0]


def test_external_storage_is_not_read(hostile):
    def change(root, folder):
        home = root["traces/channels"]
        _renewed(
            home,
            "conductance",
            lambda: home.create_dataset(
                "conductance", (4800,), "f4", external=[(str(folder / "secret.txt"), 0, 19200)]
            ),
        )
        home["conductance"].attrs["unit"] = "G0"

    study = hostile(change)
    assert "other files" in study.damage[0]
    with pytest.raises(StudyError):
        study.traces()


def test_virtual_datasets_are_not_read(hostile):
    def change(root, folder):
        home = root["traces"]
        layout = h5py.VirtualLayout(shape=(13,), dtype="i8")
        layout[:] = h5py.VirtualSource(str(folder / "other.h5"), "x", shape=(4800,))[:13]
        _renewed(home, "offsets", lambda: home.create_virtual_dataset("offsets", layout))

    assert "other files" in hostile(change).damage[0]


def test_sizes_that_are_only_claimed_ask_for_no_memory(hostile):
    def change(root, _):
        home = root["traces"]
        _renewed(home, "offsets", lambda: home.create_dataset("offsets", (10**13,), "i8", chunks=(2**20,)))

    assert "claims more than is stored" in hostile(change).damage[0]


@pytest.mark.parametrize("kind", [h5py.string_dtype(), h5py.ref_dtype, np.dtype([("a", "f4")]), h5py.vlen_dtype("f4")])
def test_kinds_of_data_that_no_study_has_are_refused(hostile, kind):
    def change(root, _):
        home = root["traces/table"]
        _renewed(home, "molecule", lambda: home.create_dataset("molecule", (12,), kind, chunks=(12,)))
        if kind.fields is None and h5py.check_string_dtype(kind) is not None:
            home["molecule"][:] = "x"

    assert "the traces" in hostile(change).damage[0]


def test_parts_that_do_not_fit_together_are_named(hostile):
    def change(root, _):
        root["traces/offsets"][5] = 10**9

    assert "offsets do not rise" in hostile(change).damage[0]


def test_names_that_are_not_known_are_left_alone_and_told(hostile):
    def change(root, _):
        root["something else"] = np.arange(3)

    study = hostile(change)
    assert study.unknown == ("something else",) and study.damage == ()
