"""What can be wrong with a recording, for every format in which it can occur: a clear error or an honest reading."""

from __future__ import annotations

import contextlib
import gzip
import io
import lzma
import os
import pickle
import shutil
import struct
import subprocess
import sys
import tempfile
import tracemalloc
import warnings
import zipfile
import zlib
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path

import h5py
import nptdms
import numpy as np
import pytest
import scipy.io
from test_intake_igor import old_wave, wave

from meseta import intake
from meseta.errors import InputError, MesetaError
from meseta.intake.readers import hdf5_samples, igor, mat, numpy_files, spool, text
from meseta.recipe import Recipe

GOOD = np.geomspace(5, 1e-3, 400)
BINARY = Recipe.build({"intake": {"reader": "binary", "binary_type": "float64", "binary_channels": ["conductance_G0"]}})


# -- one channel in every format --------------------------------------------------------------------------------------


def _csv(values: np.ndarray) -> bytes:
    return ("conductance_G0\n" + "".join(f"{float(value)!r}\n" for value in values)).encode()


def _npy(values: np.ndarray) -> bytes:
    stream = io.BytesIO()
    np.save(stream, values)
    return stream.getvalue()


def _npz(values: np.ndarray, save: Callable[..., None] = np.savez) -> bytes:
    stream = io.BytesIO()
    save(stream, conductance_G0=values)
    return stream.getvalue()


def _mat(values: np.ndarray, **kind: object) -> bytes:
    stream = io.BytesIO()
    scipy.io.savemat(stream, {"conductance_G0": values}, **kind)
    return stream.getvalue()


def _h5(values: np.ndarray, **kind: object) -> bytes:
    stream = io.BytesIO()
    with h5py.File(stream, "w") as file:
        file.create_dataset("conductance_G0", data=values, **kind)
    return stream.getvalue()


def _tdms(values: np.ndarray) -> bytes:
    stream = io.BytesIO()
    with nptdms.TdmsWriter(stream) as writer:
        writer.write_segment([nptdms.ChannelObject("g", "conductance_G0", values, {"unit_string": "G0"})])
    return stream.getvalue()


def _zip_of_texts(values: np.ndarray) -> bytes:
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("a/t1.csv", _csv(values))
        archive.writestr("a/t2.csv", _csv(values))
    return stream.getvalue()


FORMS: dict[str, tuple[str, Callable[[np.ndarray], bytes]]] = {
    "text": ("a.csv", _csv),
    "text in gzip": ("a.csv.gz", lambda values: gzip.compress(_csv(values))),
    "text in xz": ("a.csv.xz", lambda values: lzma.compress(_csv(values))),
    "texts in zip": ("a.zip", _zip_of_texts),
    "npy": ("conductance_G0.npy", _npy),
    "npy in gzip": ("conductance_G0.npy.gz", lambda values: gzip.compress(_npy(values))),
    "npz": ("a.npz", _npz),
    "npz packed": ("a.npz", lambda values: _npz(values, np.savez_compressed)),
    "mat 4": ("a.mat", lambda values: _mat(values, format="4")),
    "mat 5": ("a.mat", _mat),
    "mat 5 packed": ("a.mat", lambda values: _mat(values, do_compression=True)),
    "hdf5": ("a.h5", _h5),
    "hdf5 packed": ("a.h5", lambda values: _h5(values, chunks=True, compression="gzip")),
    "tdms": ("a.tdms", _tdms),
    "igor 2": ("a.ibw", lambda values: old_wave(2, values, unit="G0", name="conductance")),
    "igor 3": ("a.ibw", lambda values: old_wave(3, values, ">", unit="G0", name="conductance")),
    "igor 5": ("a.ibw", lambda values: wave(values, unit="G0", name="conductance")),
    "binary": ("a.bin", lambda values: values.tobytes()),
}
every_form = pytest.mark.parametrize("form", FORMS)


def recipe_of(form: str) -> Recipe:
    return BINARY if form == "binary" else Recipe()


def written(folder: Path, form: str, values: np.ndarray = GOOD, name: str = "") -> Path:
    own, make = FORMS[form]
    path = folder / (name or own)
    path.write_bytes(make(values))
    return path


def outcome(path: Path, form: str) -> str:
    """Return "read", or the error; a warning or any other error is a failure."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            assert intake.read(path, recipe_of(form)).traces > 0
    except InputError as error:
        assert error.exit_code == 2
        assert "\n" not in str(error)
        assert path.name in error.where
        assert error.remedy
        return error.what
    return "read"


# -- the bytes --------------------------------------------------------------------------------------------------------


@every_form
def test_a_truncated_file_is_refused_or_read_as_far_as_it_goes(form, tmp_path):
    path = written(tmp_path, form)
    content, said = path.read_bytes(), []
    for part in (0.003, 0.02, 0.1, 0.3, 0.5, 0.9, 0.97, 0.999):
        path.write_bytes(content[: max(int(len(content) * part), 1)])
        said.append(outcome(path, form))
    if form not in ("text", "binary", "tdms", "igor 2", "igor 3", "igor 5"):
        assert "read" not in said  # what states its size, or a checksum, is never taken for whole


@every_form
def test_an_empty_file_and_one_without_samples_are_refused(form, tmp_path):
    path = written(tmp_path, form)
    path.write_bytes(b"")
    assert outcome(path, form) == "is empty"
    if form != "binary":
        assert outcome(written(tmp_path, form, np.empty(0)), form) != "read"


@every_form
def test_junk_of_any_name_is_refused(form, tmp_path):
    path = written(tmp_path, form)
    head, rng = path.read_bytes()[:200], np.random.default_rng(8)
    for junk in (rng.bytes(5000), head + rng.bytes(5000), b"\0" * 5000, b"\xff" * 5000):
        path.write_bytes(junk)
        result = outcome(path, form)
        assert form == "binary" or head == junk[:200] or result != "read"


# -- the numbers ------------------------------------------------------------------------------------------------------


@every_form
@pytest.mark.parametrize("odd", ["nan", "infinite", "constant"])
def test_odd_numbers_are_kept_or_refused(form, odd, tmp_path):
    values = {
        "nan": np.full(60, np.nan),
        "infinite": np.where(np.arange(60) % 3, 1.0, np.where(np.arange(60) % 2, np.inf, -np.inf)),
        "constant": np.full(60, 0.5),
    }[odd]
    path = written(tmp_path, form, values)
    if form.startswith("text") and odd == "nan":
        assert outcome(path, form) != ""  # rows of NaN separate traces in a text
        return
    traces = intake.read(path, recipe_of(form))
    assert traces.samples == 60 * traces.traces
    np.testing.assert_array_equal(traces.conductance[:60], values.astype(np.float32))


def _ragged(folder: Path, form: str, lengths: np.ndarray) -> Path:
    """Write traces of given lengths, as the format holds them."""
    offsets = np.concatenate([[0], np.cumsum(lengths)])
    values = np.tile(GOOD, int(offsets[-1]) // len(GOOD) + 1)[: offsets[-1]]
    rows = [values[a:b] for a, b in pairwise(offsets)]
    cells = np.empty(len(rows), object)
    cells[:] = rows
    path = folder / {"text": "a.txt", "npz": "a.npz", "hdf5": "a.h5"}.get(form, "a.mat")
    if form == "text":
        path.write_text("conductance_G0\n" + "\n\n".join("\n".join(f"{v:.6g}" for v in row) for row in rows) + "\n")
    elif form == "npz":
        np.savez(path, conductance_G0=values, offsets=offsets)
    elif form == "hdf5":
        with h5py.File(path, "w") as file:
            file["conductance_G0"], file["lengths"] = values, lengths
    elif form == "mat cells":
        scipy.io.savemat(path, {"conductance_G0": cells})
    else:
        scipy.io.savemat(path, {"conductance_G0": values, "offsets": offsets}, format="4")
    return path


@pytest.mark.parametrize("form", ["text", "npz", "hdf5", "mat cells", "mat 4"])
def test_traces_of_a_single_sample_are_read_or_left_out_and_never_joined(form, tmp_path):
    lengths = np.array([1, 30, 1, 2, 40, 1])
    traces = intake.read(_ragged(tmp_path, form, lengths))
    assert traces.lengths.tolist() in (lengths.tolist(), [30, 2, 40], [30, 40])


@pytest.mark.parametrize("form", ["npz", "hdf5", "mat 4"])
def test_very_many_tiny_traces_in_arrays(form, tmp_path):
    assert intake.read(_ragged(tmp_path, form, np.full(200_000, 3))).traces == 200_000


def test_very_many_tiny_traces_in_a_text(tmp_path):
    (tmp_path / "a.txt").write_text("conductance_G0\n" + "1\n0.5\n0.1\n\n" * 50_000)
    assert intake.read(tmp_path / "a.txt").traces == 50_000


@pytest.mark.parametrize("form", ["text", "npz", "mat", "hdf5", "tdms"])
def test_displacement_that_repeats_or_runs_back_is_kept_as_recorded(form, tmp_path):
    drive = np.array([0.0, 0.1, 0.1, 0.05, 0.2, 0.3, 0.25, 0.4, 0.4, 0.5])
    content = {"displacement_nm": drive, "conductance_G0": np.linspace(2, 1, 10)}
    path = tmp_path / {"text": "a.csv", "npz": "a.npz", "mat": "a.mat", "hdf5": "a.h5", "tdms": "a.tdms"}[form]
    if form == "text":
        np.savetxt(path, np.column_stack(list(content.values())), header=",".join(content), delimiter=",", comments="")
    elif form == "npz":
        np.savez_compressed(path, **content)
    elif form == "mat":
        scipy.io.savemat(path, content, do_compression=True)
    elif form == "hdf5":
        with h5py.File(path, "w") as file:
            for name, values in content.items():
                file[name] = values
    else:
        with nptdms.TdmsWriter(path) as writer:
            writer.write_segment([nptdms.ChannelObject("g", name, values) for name, values in content.items()])
    traces = intake.read(path, Recipe.build({"cutting": {"method": "none"}}))
    np.testing.assert_allclose(traces.drive_values(0, 1), drive, rtol=1e-6)


# -- cells of texts ---------------------------------------------------------------------------------------------------


def _pack(name: str, content: bytes) -> bytes:
    if name.endswith(".gz"):
        return gzip.compress(content)
    if name.endswith(".zip"):
        stream = io.BytesIO()
        with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
            archive.writestr("t.csv", content)
        return stream.getvalue()
    return content


@pytest.mark.parametrize("name", ["a.csv", "a.csv.gz", "a.zip"])
@pytest.mark.parametrize(
    ("fault", "word"),
    [("0.61,abc", "'abc' is not a number"), ("0.61,1,2", "3 cells where 2"), ("0.61", "1 cell"),
     ("0.6\x001,1", "number")],
)  # fmt: skip
def test_faults_in_rows_of_texts_packed_or_not(name, fault, word, tmp_path):
    rows = [f"{0.01 * n:.2f},{2.0 / (n + 1):.6g}" for n in range(60)]
    rows.insert(40, fault)
    path = tmp_path / name
    path.write_bytes(_pack(name, ("z_nm,conductance_G0\n" + "\n".join(rows) + "\n").encode()))
    what = outcome(path, "text")
    assert word in what or (fault.count("\0") and "NUL" in what)


@pytest.mark.parametrize("name", ["line.csv", "line.csv.gz"])
@pytest.mark.parametrize("cell", ["a", "1,"])
def test_a_line_of_50_megabyte_is_refused_with_bounded_memory(name, cell, tmp_path):
    path = tmp_path / name
    content = (cell * (50_000_000 // len(cell))).encode()
    path.write_bytes(_pack(name, content) if name == "line.csv" else gzip.compress(content, 1))
    tracemalloc.start()
    try:
        assert outcome(path, "text") != "read"
        assert tracemalloc.get_traced_memory()[1] < 600 << 20
    finally:
        tracemalloc.stop()


# -- claims and bombs -------------------------------------------------------------------------------------------------


def _npy_that_claims(shape: str) -> bytes:
    head = f"{{'descr': '<f8', 'fortran_order': False, 'shape': {shape}, }}".ljust(117) + "\n"
    return b"\x93NUMPY\x01\x00" + struct.pack("<H", len(head)) + head.encode() + GOOD.tobytes()


def _stored(name: str, content: bytes) -> bytes:
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr(name, content)
    return stream.getvalue()


def _mat_that_claims(size: int, **kind: object) -> bytes:
    return _mat(GOOD, **kind).replace(struct.pack("<i", len(GOOD)), struct.pack("<i", size), 1)


def _tdms_that_claims(size: int) -> bytes:
    return _tdms(GOOD).replace(struct.pack("<Q", len(GOOD)), struct.pack("<Q", size), 1)


CLAIMS = {
    "one.npy": _npy_that_claims("(10000000000,)"),
    "two.npy": _npy_that_claims("(1000000000, 1000000000, 1000000000)"),
    "minus.npy": _npy_that_claims("(-5, -80)"),
    "words.npy": _npy_that_claims("('a',)"),
    "code.npy": _npy_that_claims("(__import__('os').getpid(),)"),
    "deep.npy": _npy_that_claims("(" * 3000 + ")" * 3000),
    "one.npy.gz": gzip.compress(_npy_that_claims("(10000000000,)")),
    "a.npz": _stored("conductance_G0.npy", _npy_that_claims("(10000000000,)")),
    "five.mat": _mat_that_claims(2_000_000_000),
    "four.mat": _mat_that_claims(2_000_000_000, format="4"),
}


@pytest.mark.parametrize("name", CLAIMS)
def test_claims_beyond_the_file_are_refused_before_room_is_made(name, tmp_path):
    (tmp_path / name).write_bytes(CLAIMS[name])
    tracemalloc.start()
    try:
        assert outcome(tmp_path / name, "") != "read"
        assert tracemalloc.get_traced_memory()[1] < 64 << 20
    finally:
        tracemalloc.stop()


def test_a_channel_that_claims_more_than_was_written_is_read_as_far_as_it_goes(tmp_path):
    """The format is written on until the program stops: what is missing is said."""
    (tmp_path / "a.tdms").write_bytes(_tdms_that_claims(1 << 40))
    with intake.open_recording(tmp_path / "a.tdms") as recording:
        assert any("not whole" in doubt for doubt in recording.doubts)
    traces = intake.read(tmp_path / "a.tdms")
    np.testing.assert_array_equal(traces.conductance, GOOD.astype(np.float32))


def _bombs() -> dict[str, Callable[[], bytes]]:
    zeros = np.zeros(9_000_000)
    head = _mat(GOOD)[:128]
    plain = struct.pack("<IIIIII", 14, 72_000_056, 6, 8, 6, 0) + struct.pack("<IIii", 5, 8, 1, 9_000_000)
    plain += struct.pack("<IIQ", 1, 1, ord("g")) + struct.pack("<II", 9, 72_000_000)

    def variable() -> bytes:
        packed = zlib.compress(plain + bytes(72_000_000))
        return head + struct.pack("<II", 15, len(packed)) + packed

    return {
        "a.npz": lambda: _npz(zeros, np.savez_compressed),
        "conductance_G0.npy.gz": lambda: gzip.compress(_npy(zeros)),
        "conductance_G0.npy.xz": lambda: lzma.compress(_npy(zeros), preset=0),
        "a.mat": variable,
        "a.csv.gz": lambda: gzip.compress(b"conductance_G0\n" + b"1\n" * 36_000_000),
        "a.zip": lambda: _stored("t.csv", b"conductance_G0\n" + b"1\n" * 36_000_000),
    }


@pytest.mark.parametrize("name", _bombs())
def test_bombs_are_refused_with_bounded_memory(name, tmp_path):
    (tmp_path / name).write_bytes(_bombs()[name]())
    tracemalloc.start()
    try:
        assert "unpacks" in outcome(tmp_path / name, "")
        assert tracemalloc.get_traced_memory()[1] < 300 << 20
    finally:
        tracemalloc.stop()


def test_objects_are_never_read(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    objects = np.array([Trap(), 1], object)
    stream = io.BytesIO()
    np.save(stream, objects, allow_pickle=True)
    np.savez(tmp_path / "objects.npz", allow_pickle=True, a=objects, conductance_G0=GOOD)
    files = {"a.npy": stream.getvalue(), "a.npy.gz": gzip.compress(stream.getvalue()), "a.pkl": pickle.dumps(Trap())}
    files["pickle.npz"] = _stored("conductance_G0.npy", pickle.dumps(Trap()))
    for name, content in files.items():
        (tmp_path / name).write_bytes(content)
        assert outcome(tmp_path / name, "") != "read"
    with intake.open_recording(tmp_path / "objects.npz") as recording:
        assert any("objects" in doubt for doubt in recording.doubts)
    assert not (tmp_path / "should-never-exist").exists()


class Trap:
    def __reduce__(self):
        return (os.mkdir, ("should-never-exist",))


# -- the file ---------------------------------------------------------------------------------------------------------


@every_form
def test_names_with_spaces_line_ends_and_other_letters(form, tmp_path):
    ending = "".join(Path(FORMS[form][0]).suffixes)
    for stem in ("a b", "ä µ ζ", "line\nend", "[x]*", "'q\"", os.fsdecode(b"not \xff utf-8")):
        folder = tmp_path / stem
        folder.mkdir()
        name = f"{stem} conductance_G0{ending}"
        traces = intake.read(written(folder, form, name=name), recipe_of(form))
        assert traces.sources[0].name == name.replace("\udcff", "\\udcff")  # which any file and terminal takes
        assert intake.read(folder, recipe_of(form)).samples == traces.samples


@every_form
def test_a_file_that_goes_away_or_shrinks_after_it_was_opened(form, tmp_path, monkeypatch):
    """What is missing is an error of that file, or was read already; never numbers that were not recorded."""
    for module in (mat, igor, numpy_files, text):
        monkeypatch.setattr(module, "LARGE_BYTE", 100)
    monkeypatch.setattr(hdf5_samples, "CACHED_BYTE", 100)
    for harm in ("gone", "shrunk", "grown"):
        folder = tmp_path / harm
        folder.mkdir()
        path = written(folder, form)
        with intake.open_recording(path, recipe_of(form)) as recording:
            if harm == "gone":
                path.unlink()
            elif harm == "shrunk":
                os.truncate(path, path.stat().st_size // 3)
            else:
                with path.open("ab") as file:
                    file.write(GOOD.tobytes())
            try:
                found = intake.traces_from([recording], recipe_of(form)).conductance
            except InputError as error:
                assert harm != "grown"
                assert path.name in error.where
                continue
            np.testing.assert_array_equal(found[: len(GOOD)], GOOD.astype(np.float32))


@pytest.fixture
def not_root():
    """Let the test run as a user without rights; the folder is one that it can look into."""
    folder = Path(tempfile.mkdtemp())
    folder.chmod(0o755)
    written(folder, "hdf5")
    intake.read(folder / "a.h5")  # all modules are there before rights are given up
    user = os.geteuid() if hasattr(os, "geteuid") else -1
    if user == 0:
        os.seteuid(65534)
    yield folder
    if user == 0:
        os.seteuid(0)
    shutil.rmtree(folder)


@pytest.mark.skipif(os.name != "posix", reason="rights of files are those of POSIX")
@every_form
def test_a_file_or_folder_without_permission(form, not_root):
    with _as_owner():
        path = written(not_root, form)
        path.chmod(0)
    assert "may not be read" in outcome(path, form)
    with _as_owner():
        inner = not_root / "inner"
        inner.mkdir()
        path = written(inner, form)
        inner.chmod(0)
    with pytest.raises(MesetaError) as raised:
        intake.read(path, recipe_of(form))
    assert "may not" in raised.value.what or "cannot" in raised.value.what
    with pytest.raises(MesetaError):
        intake.read(inner, recipe_of(form))
    with _as_owner():
        inner.chmod(0o755)


@contextlib.contextmanager
def _as_owner():
    user = os.geteuid()
    if user == 65534:
        os.seteuid(0)
    yield
    os.seteuid(user)


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="a device that is always full")
@pytest.mark.parametrize("form", ["text", "text in gzip", "npy in gzip", "npz packed", "mat 5 packed"])
def test_a_full_disk_is_said(form, tmp_path, monkeypatch):
    for module in (mat, numpy_files, text):
        monkeypatch.setattr(module, "LARGE_BYTE", 100)
    monkeypatch.setattr(spool.tempfile, "TemporaryFile", lambda **_: Path("/dev/full").open("r+b", buffering=0))  # noqa: SIM115
    assert "is full" in outcome(written(tmp_path, form), form)


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="a device that is always full")
@pytest.mark.parametrize("form", ["hdf5", "npy", "mat 5", "mat 4", "igor 5"])
def test_a_full_disk_is_said_where_columns_are_turned(form, tmp_path, monkeypatch):
    for module in (mat, numpy_files, igor):
        monkeypatch.setattr(module, "LARGE_BYTE", 100)
    monkeypatch.setattr(hdf5_samples, "CACHED_BYTE", 100)
    monkeypatch.setattr(spool.tempfile, "TemporaryFile", lambda **_: Path("/dev/full").open("r+b", buffering=0))  # noqa: SIM115
    path = written(tmp_path, form, np.tile(GOOD, (5, 1)))
    turned = "columns" if form in ("hdf5", "npy") else "rows"
    with pytest.raises(InputError, match="is full"):
        intake.read(path, Recipe.build({"intake": {"layout": turned}}))


# -- mutants of every format ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("mode", [[], ["--large"]], ids=["small", "as if large"])
@pytest.mark.skipif(os.name != "posix", reason="memory and time are limited by means of POSIX")
def test_mutants_of_every_format_are_read_or_refused_and_nothing_else(mode):
    """The campaign, in short: a crash, a hang, a foreign error, much memory or a word on the terminal fails it."""
    campaign = Path(__file__).parents[1] / "campaigns" / "fuzz_readers.py"
    call = [sys.executable, str(campaign), "--each", "12", "--seed", "7", *mode]
    done = subprocess.run(call, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr
    assert done.stderr == ""
    peak = done.stdout.rsplit("peak ", 1)[-1].split()[0]
    assert int(peak) < 600
