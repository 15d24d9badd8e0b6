"""Bad files: one clear error with file and place; good files of a batch are taken in; nothing outside is opened."""

from __future__ import annotations

import errno
import gzip
import io
import os
import pickle
import tracemalloc
import warnings
import zipfile
from pathlib import Path

import h5py
import hdf5plugin
import nptdms
import numpy as np
import pytest
import scipy.io
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from meseta import intake
from meseta.errors import InputError, MesetaError
from meseta.recipe import Recipe

GOOD = "displacement_nm,conductance_G0\n" + "".join(f"{0.01 * n:.2f},{2.0 / (n + 1):.6g}\n" for n in range(60))


def error_of(path, recipe: Recipe | None = None) -> InputError:
    with pytest.raises(InputError) as raised:
        intake.read(path, recipe)
    assert raised.value.exit_code == 2
    assert "\n" not in str(raised.value)
    return raised.value


def written(folder: Path, name: str, content: str | bytes) -> Path:
    path = folder / name
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return path


@pytest.mark.parametrize(
    ("name", "content", "word"),
    [
        ("a.csv", "", "empty"),
        ("a.csv", "\n\n  \n", "empty"),
        ("a.csv", "displacement_nm,conductance_G0\n", "no rows of numbers"),
        ("a.h5", GOOD.replace("0", "x").replace("1", "y").replace("2", "z"), "not an HDF5 file"),
        ("a.h5", b"\x89HDF\r\n\x1a\n" + b"\x00" * 100, "damaged"),
        ("a.bin", bytes(range(256)) * 20, "binary"),
        ("a.csv", GOOD + "0.61,abc\n", "'abc' is not a number"),
        ("a.csv", GOOD + "0.61,1,2\n", "3 cells where 2"),
        ("a.csv", GOOD[:200].encode() + b"\x00\x00" + GOOD[200:].encode(), "NUL"),
        ("a.csv", "displacement_nm,something\n0,1\n1,2\n", "no channel"),
        ("a.csv", "displacement (nm),conductance (parsec)\n0,1\n1,2\n", "parsec"),
        ("a.npy", b"\x93NUMPY\x01\x00", "damaged"),
        ("a.tdms", b"TDSm" + b"\xff" * 60, "no samples"),
        ("a.mat", b"M" * 124 + b"\x00\x01IM" + b"\xff" * 64, "damaged"),
        ("a.csv.gz", gzip.compress(GOOD.encode())[:-30], "damaged"),
    ],
)
def test_each_fault_has_its_words(tmp_path, name, content, word):
    error = error_of(written(tmp_path, name, content))
    assert word in str(error)
    assert name in error.where


def test_a_bad_cell_is_named_with_its_line(tmp_path):
    error = error_of(written(tmp_path, "a.csv", "# bias_mV: 100\n" + GOOD.replace("0.30,", "0.30,x")))
    assert ", line 33" in error.where


def test_missing_files_empty_folders_and_patterns(tmp_path):
    written(tmp_path, "trace_1.csv", GOOD)
    assert "trace_1.csv" in error_of(tmp_path / "trace_l.csv").remedy
    assert "no file matches" in error_of(str(tmp_path / "*.h5")).what
    (tmp_path / "empty").mkdir()
    assert "no recordings" in error_of(tmp_path / "empty").what


def test_good_files_of_a_batch_are_taken_in_and_bad_ones_listed(tmp_path):
    for n in (1, 2, 10):
        written(tmp_path, f"t {n} ä.csv", GOOD)
    written(tmp_path, "t 3.csv", GOOD + "1,x\n")
    written(tmp_path, "t 4.csv", b"\x00\x01")
    written(tmp_path, "README.md", "1 2 3\n")
    written(tmp_path, ".hidden.csv", GOOD)
    traces = intake.read(tmp_path)
    assert [source.name for source in traces.sources] == ["t 1 ä.csv", "t 2 ä.csv", "t 10 ä.csv"]
    bad = traces.notes["bad_files"]
    assert [Path(one["where"].split(",")[0]).name for one in bad] == ["t 3.csv", "t 4.csv"]
    assert all(set(one) == {"what", "where", "remedy"} for one in bad)
    assert traces.notes["passed_over"] == [".hidden.csv (hidden)", "README.md"]
    with pytest.raises(InputError):
        intake.read(tmp_path, strict=True)


def test_a_file_without_permission(tmp_path, monkeypatch):
    path = written(tmp_path, "a.csv", GOOD)

    def refuse(*_, **__):
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(Path, "open", refuse)
    assert "may not be read" in error_of(path).what


def test_nothing_outside_the_file_is_opened(tmp_path):
    secret = tmp_path / "other.h5"
    with h5py.File(secret, "w") as file:
        file["conductance_G0"] = np.linspace(2, 1, 50)
    raw = tmp_path / "raw.bin"
    np.linspace(2, 1, 50).tofile(raw)
    with h5py.File(tmp_path / "linked.h5", "w") as file:
        file["conductance_G0"] = h5py.ExternalLink(str(secret), "conductance_G0")
    with h5py.File(tmp_path / "virtual.h5", "w") as file:
        layout = h5py.VirtualLayout((50,), "f8")
        layout[:] = h5py.VirtualSource(str(secret), "conductance_G0", (50,))
        file.create_virtual_dataset("conductance_G0", layout)
    with h5py.File(tmp_path / "stored.h5", "w") as file:
        file.create_dataset("conductance_G0", (50,), "f8", external=[(str(raw), 0, 400)])
    for name, word in (("linked.h5", "another file"), ("virtual.h5", "another file"), ("stored.h5", "another file")):
        assert word in error_of(tmp_path / name).what


def test_link_loops_and_soft_links_are_walked_once(tmp_path):
    path = tmp_path / "loop.h5"
    with h5py.File(path, "w") as file:
        group = file.create_group("a")
        group["conductance_G0"] = np.linspace(2, 1, 50)
        group["again"] = file["/"]
        group["soft"] = h5py.SoftLink("/a/conductance_G0")
    assert intake.read(path).traces == 1


def test_claims_beyond_the_file_and_bombs_are_refused(tmp_path):
    path = tmp_path / "claims.h5"
    with h5py.File(path, "w") as file:
        file.create_dataset("conductance_G0", (10**10,), "f8")
    assert "never written" in error_of(path).what
    with h5py.File(path, "w") as file:
        file.create_dataset("conductance_G0", data=np.zeros(20_000_000), chunks=(2_000_000,), compression=9)
    assert "times its size" in error_of(path).what
    bomb = written(tmp_path, "bomb.csv.gz", gzip.compress(b"conductance_G0\n" + b"1\n" * 60_000_000))
    tracemalloc.start()
    assert "unpacks to more than" in error_of(bomb).what
    assert tracemalloc.get_traced_memory()[1] < 400 << 20
    tracemalloc.stop()


def test_names_with_spaces_line_ends_and_other_letters(tmp_path):
    for name in ("a b.csv", "ä µ ζ.csv", "line\nend.csv", "[x]*.csv"):
        traces = intake.read(written(tmp_path, name, GOOD))
        assert traces.sources[0].name == name
    error = error_of(written(tmp_path, "line\nend bad.csv", GOOD + "x,y\n"))
    assert "end bad.csv" in error.where


def test_displacement_that_repeats_or_runs_back_is_kept_as_recorded(tmp_path):
    drive = np.array([0.0, 0.1, 0.1, 0.05, 0.2, 0.3, np.inf, 0.4, np.nan, 0.5])
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["conductance_G0"], file["displacement_nm"] = np.linspace(2, 1, 10), drive
    traces = intake.read(tmp_path / "a.h5", Recipe.build({"cutting": {"method": "none"}}))
    np.testing.assert_allclose(traces.drive_values(0, 1), drive, rtol=1e-6)


def test_a_file_that_shrinks_or_goes_while_it_is_read(tmp_path):
    """Positioned reads find the end; what is missing is an error of that file, never numbers that were not recorded."""
    recipe = Recipe.build(
        {"intake": {"reader": "binary", "binary_type": "float32", "binary_channels": ["conductance_G0"]}}
    )
    path = written(tmp_path, "a.bin", np.linspace(2, 1, 5000).astype("<f4").tobytes())
    with intake.open_recording(path, recipe) as recording:
        os.truncate(path, 400)
        with pytest.raises(InputError, match="became shorter"):
            intake.traces_from([recording], recipe)
    path.unlink()
    assert "does not exist" in error_of(path, recipe).what


def test_a_bad_cell_in_the_first_row_is_no_heading(tmp_path):
    error = error_of(written(tmp_path, "a.csv", "z_nm,G_G0\n0.0,oops\n0.1,1\n0.2,0.5\n"))
    assert "'oops' is not a number" in error.what
    assert error.where.endswith("line 2")


def test_very_many_tiny_traces(tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["conductance_G0"] = np.tile([1, 0.5, 0.1], 300_000)
        file["offsets"] = np.arange(300_001) * 3
    traces = intake.read(tmp_path / "a.h5")
    assert traces.traces == 300_000
    assert set(traces.table["direction"][:5]) == {"opening"}


def test_a_full_disk_is_said_and_leaves_nothing(tmp_path, monkeypatch):
    from meseta.intake.readers import spool, text

    monkeypatch.setattr(text, "LARGE_BYTE", 100)

    class Full(io.RawIOBase):
        def write(self, _):
            raise OSError(errno.ENOSPC, "No space left on device")

        def seek(self, *_):
            return 0

    monkeypatch.setattr(spool.tempfile, "TemporaryFile", lambda **_: Full())
    error = error_of(written(tmp_path, "a.csv", GOOD))
    assert "is full" in error.what
    assert "TMPDIR" in error.remedy


def test_a_damaged_heap_of_rows_is_refused_before_the_library_walks_it(tmp_path):
    content = bytearray(ORIGINALS["rows.h5"])
    heap = content.index(b"GCOL")
    content[heap + 24 : heap + 32] = bytes(8)  # the first object has no size: the next is the same again
    with intake.open_recording(written(tmp_path, "heap.h5", bytes(content))) as recording:
        assert any("/conductance_G0" in doubt and "damaged" in doubt for doubt in recording.doubts)
    assert intake.read(written(tmp_path, "whole.h5", ORIGINALS["rows.h5"])).lengths.tolist() == [20, 21, 22, 23]


class Trap:
    def __reduce__(self):
        return (os.mkdir, ("should-never-exist",))


def test_pickles_are_never_loaded(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    np.save(tmp_path / "a.npy", np.array([Trap(), 1], object), allow_pickle=True)
    assert "never read" in error_of(tmp_path / "a.npy").what
    with zipfile.ZipFile(tmp_path / "b.npz", "w") as archive:
        archive.writestr("conductance.npy", pickle.dumps(Trap()))
    error_of(tmp_path / "b.npz")
    assert not (tmp_path / "should-never-exist").exists()


def test_odd_but_readable_traces_pass(tmp_path):
    path = tmp_path / "odd.h5"
    rows = {
        "t1": [np.nan] * 8,
        "t2": [1.0],
        "t3": [np.inf, -np.inf, 1, 1, 1, 0.1, 0.1, 0.1, 0.1],
        "t4": [0.5] * 9,
        "t5": np.linspace(2, 1, 30),
    }
    with h5py.File(path, "w") as file:
        for name, values in rows.items():
            file.create_dataset(f"conductance_G0/{name}", data=np.asarray(values, float))
    traces = intake.read(path)
    assert traces.traces == 4  # a single value is no samples of a channel
    assert traces.samples == 8 + 9 + 9 + 30


def test_a_long_line_without_numbers_is_refused_quickly(tmp_path):
    error_of(written(tmp_path, "line.csv", b"a" * 5_000_000))


# -- mutation: every reader, bounded ----------------------------------------------------------------------------------


def _originals() -> dict[str, bytes]:
    values, drive = np.linspace(2, 1, 64).astype(np.float32), np.linspace(0, 1, 64)
    found = {"a.csv": GOOD.encode()}
    stream = io.BytesIO()
    with h5py.File(stream, "w") as file:
        file.create_dataset("conductance_G0", data=np.stack([values] * 4), chunks=(2, 64), compression="gzip")
        file["displacement_nm"] = drive
        file.attrs["bias_mV"] = 100.0
    found["a.h5"] = stream.getvalue()
    stream = io.BytesIO()
    np.savez(stream, conductance_G0=np.stack([values] * 4), displacement_nm=drive)
    found["a.npz"] = stream.getvalue()
    for packed in (False, True):
        stream = io.BytesIO()
        scipy.io.savemat(stream, {"conductance_G0": values, "s": {"bias_mV": 100.0}}, do_compression=packed)
        found[f"a{packed}.mat"] = stream.getvalue()
    stream = io.BytesIO()
    with nptdms.TdmsWriter(stream) as writer:
        writer.write_segment([nptdms.ChannelObject("g", "conductance_G0", values, {"unit_string": "G0"})])
    found["a.tdms"] = stream.getvalue()
    found["a.csv.gz"] = gzip.compress(GOOD.encode())
    stream = io.BytesIO()
    with h5py.File(stream, "w") as file:
        rows = file.create_dataset("conductance_G0", (4,), h5py.vlen_dtype("f4"))
        for row in range(4):
            rows[row] = np.linspace(2, 1, 20 + row)
        file.create_dataset("remarks", data=np.arange(256.0).reshape(4, 64), chunks=(2, 64), **hdf5plugin.LZ4())
    found["rows.h5"] = stream.getvalue()
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        for trace in range(3):
            archive.writestr(f"t{trace}.csv", GOOD)
    found["a.zip"] = stream.getvalue()
    found["blocks.txt"] = "\n".join(
        f"bias_mV: {100 + n}\nz (nm)\tG (G0)\n" + "0.0\t1.0\n0.1\t0.5\n" for n in range(9)
    ).encode()
    return found


ORIGINALS = _originals()


@pytest.mark.parametrize("name", sorted(ORIGINALS))
@settings(deadline=None, max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture], derandomize=True)
@given(data=st.data())
def test_mutants_are_read_or_refused_but_nothing_else(tmp_path, name, data):
    """Any change of bytes gives traces or one of our errors; never a crash, never a foreign error."""
    content = bytearray(ORIGINALS[name])
    for _ in range(data.draw(st.integers(1, 6))):
        place = data.draw(st.integers(0, len(content) - 1))
        content[place] = data.draw(st.sampled_from([0, 1, 10, 32, 44, 127, 128, 255]))
    cut = data.draw(st.one_of(st.none(), st.integers(1, len(content))))
    path = written(tmp_path, name, bytes(content[:cut]))
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error", RuntimeWarning)
            assert intake.read(path).traces > 0
    except MesetaError as error:
        assert str(error)
