"""Damaged recordings of every format, by the thousand: each gives traces or one clear error, and nothing else.

    python tests/campaigns/fuzz_readers.py --each 2000 --seed 1 [--forms mat ...] [--keep FOLDER]

Small recordings are written by other libraries, bytes of them changed (also inside of what is packed, which is then
packed anew; checksums are put right), and read by ``read`` and ``describe`` in this process, whose memory is limited.
A crash ends the process; a foreign error, a warning, a word on the terminal, or a read of more than a few seconds is
printed with the form and the number of the mutant, and makes the exit code 1.
"""

from __future__ import annotations

import argparse
import gzip
import io
import os
import random
import resource
import signal
import struct
import sys
import tempfile
import traceback
import warnings
import zipfile
import zlib
from collections.abc import Callable
from pathlib import Path

import h5py
import hdf5plugin
import nptdms
import numpy as np
import scipy.io

sys.path.insert(0, str(Path(__file__).parents[1] / "intake"))
from test_intake_igor import old_wave, put_right, wave

from meseta import intake
from meseta.errors import MesetaError
from meseta.recipe import Recipe

MOST_BYTE = 3 << 30
MOST_SECONDS = 10
VALUES, DRIVE = np.linspace(2, 1, 64).astype(np.float32), np.linspace(0, 1, 64)
ROWS = np.stack([VALUES] * 4)
TEXT = "displacement_nm,conductance_G0\n" + "".join(f"{0.01 * n:.2f},{2.0 / (n + 1):.6g}\n" for n in range(60))
NUMBERS = (0, 1, 2, 0x7F, 0x80, 0xFF, 0x100, 0x7FFF, 0xFFFF, 0x7FFFFFFF, 0x80000000, 0xFFFFFFFF, 1 << 40, (1 << 63) - 1)


def _npy(array: np.ndarray) -> bytes:
    stream = io.BytesIO()
    np.save(stream, array)
    return stream.getvalue()


def _mat(**kind: object) -> bytes:
    cells = np.empty(2, object)
    cells[:] = [VALUES, VALUES[:9]]
    content = {"conductance_G0": ROWS.T, "displacement_nm": DRIVE, "note": "text", "bias_mV": 100.0}
    more = {} if kind.get("format") == "4" else {"s": {"bias_mV": 100.0, "deep": {"x": VALUES}}, "other": cells}
    stream = io.BytesIO()
    scipy.io.savemat(stream, content | more, **kind)
    return stream.getvalue()


def _h5(write: Callable[[h5py.File], None]) -> bytes:
    stream = io.BytesIO()
    with h5py.File(stream, "w") as file:
        write(file)
    return stream.getvalue()


def _h5_rows(file: h5py.File) -> None:
    file.create_dataset("conductance_G0", data=ROWS, chunks=(2, 64), compression="gzip", shuffle=True)
    file["displacement_nm"] = DRIVE
    file.attrs["bias_mV"] = 100.0
    file["note"] = "a text"


def _h5_ragged(file: h5py.File) -> None:
    rows = file.create_dataset("conductance_G0", (4,), h5py.vlen_dtype("f4"))
    for row in range(4):
        rows[row] = VALUES[: 20 + row]
    file.create_dataset("remarks", data=np.arange(256.0).reshape(4, 64), chunks=(2, 64), **hdf5plugin.LZ4())


def _h5_groups(file: h5py.File) -> None:
    for trace in range(4):
        group = file.create_group(f"traces/{trace}")
        group.attrs["bias"] = 0.1
        table = np.zeros(64, [("G", "f4"), ("z", "f8")])
        table["G"], table["z"] = VALUES, DRIVE
        group.create_dataset("data", data=table)


def _tdms(interleaved: bool) -> bytes:
    stream = io.BytesIO()
    with nptdms.TdmsWriter(stream) as writer:
        for _ in range(2):
            unit = {"unit_string": "G0", "wf_increment": 1e-4}
            channels = [nptdms.ChannelObject("g", "conductance_G0", VALUES, unit)]
            writer.write_segment([*channels, nptdms.ChannelObject("g", "z_nm", DRIVE.astype("f4"), {})])
    found = bytearray(stream.getvalue())
    if interleaved:
        at = -1
        while (at := found.find(b"TDSm", at + 1)) >= 0:
            found[at + 4] |= 32
    return bytes(found)


def _packed_variables(plain: bytes) -> bytes:
    """Return a MAT 5 file with whatever stands in it packed variable by variable."""
    found, at = plain[:128], 128
    while at + 8 <= len(plain):
        end = min(at + 8 + int.from_bytes(plain[at + 4 : at + 8], "little"), len(plain))
        packed = zlib.compress(plain[at:end], 1)
        found += struct.pack("<II", 15, len(packed)) + packed
        at = end
    return found


def _zipped(name: str) -> Callable[[bytes], bytes]:
    def pack(content: bytes) -> bytes:
        stream = io.BytesIO()
        with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
            archive.writestr(name, content)
            archive.writestr("second_" + name, content)
        return stream.getvalue()

    return pack


def _whole_wave(content: bytes) -> bytes:
    """Return a wave with its checksum put right."""
    data = bytearray(content)
    order = "<" if data[:1] in (b"\x02", b"\x03", b"\x05") else ">"
    version = data[0] if order == "<" else data[1:2][0] if len(data) > 1 else 0
    size, place = {2: (126, 14), 3: (130, 18), 5: (384, 2)}.get(version, (0, 0))
    if size and len(data) >= size:
        header = data[:size]
        put_right(header, place, order)
        data[:size] = header
    return bytes(data)


def _as_it_is(content: bytes) -> bytes:
    return content


def _npz(compressed: bool) -> bytes:
    stream = io.BytesIO()
    (np.savez_compressed if compressed else np.savez)(stream, conductance_G0=ROWS, displacement_nm=DRIVE, bias_V=0.1)
    return stream.getvalue()


BLOCKS = "\n".join(f"bias_mV: {100 + n}\nz (nm)\tG (G0)\n" + "0.0\t1.0\n0.1\t0.5\n" for n in range(9)).encode()
WIDE = ("z_nm;" + ";".join(f"G_{n}" for n in range(5)) + "\n" + "0,1;1,0;2,0;3e-1;4;5\n" * 9).encode("utf-16")
TWO = np.stack([np.linspace(2, 1, 64), DRIVE], axis=1).astype("<f4")
STRUCTURED = np.zeros(64, [("conductance_G0", "f4"), ("displacement_nm", "f8")])

FORMS: dict[str, tuple[str, bytes, Callable[[bytes], bytes]]] = {
    "mat 4": ("a.mat", _mat(format="4"), _as_it_is),
    "mat 5": ("a.mat", _mat(), _as_it_is),
    "mat 5 packed": ("a.mat", _mat(do_compression=True), _as_it_is),
    "mat 5 inside": ("a.mat", _mat(), _packed_variables),
    "npy": ("conductance_G0.npy", _npy(ROWS), _as_it_is),
    "npy turned": ("conductance_G0.npy", _npy(np.asfortranarray(ROWS)), _as_it_is),
    "npy structured": ("a.npy", _npy(STRUCTURED), _as_it_is),
    "npy inside": ("conductance_G0.npy.gz", _npy(ROWS), gzip.compress),
    "npz": ("a.npz", _npz(compressed=False), _as_it_is),
    "npz packed": ("a.npz", _npz(compressed=True), _as_it_is),
    "npz inside": ("a.npz", _npy(ROWS), _zipped("conductance_G0.npy")),
    "igor 2": ("a.ibw", old_wave(2, VALUES, unit="S", note="bias_V = 0.1"), _whole_wave),
    "igor 3": ("a.ibw", old_wave(3, VALUES, ">", unit="S", note="bias_V = 0.1"), _whole_wave),
    "igor 5": ("a.ibw", wave(ROWS.T, unit="S", note="bias_V = 0.1"), _whole_wave),
    "tdms": ("a.tdms", _tdms(interleaved=False), _as_it_is),
    "tdms in turn": ("a.tdms", _tdms(interleaved=True), _as_it_is),
    "hdf5 rows": ("a.h5", _h5(_h5_rows), _as_it_is),
    "hdf5 ragged": ("a.h5", _h5(_h5_ragged), _as_it_is),
    "hdf5 groups": ("a.h5", _h5(_h5_groups), _as_it_is),
    "text": ("a.csv", TEXT.encode(), _as_it_is),
    "text blocks": ("a.txt", BLOCKS, _as_it_is),
    "text wide": ("a.csv", WIDE, _as_it_is),
    "text gzip": ("a.csv.gz", gzip.compress(TEXT.encode()), _as_it_is),
    "text inside": ("a.zip", TEXT.encode(), _zipped("t.csv")),
    "zip": ("a.zip", _zipped("t.csv")(TEXT.encode()), _as_it_is),
    "binary": ("a.bin", b"header7" + TWO.tobytes(), _as_it_is),
}
BINARY = Recipe.build({
    "intake": {
        "reader": "binary", "binary_type": "float32", "binary_header_byte": 7, "binary_channels": ["g", "z"],
        "channels": {"g": {"role": "conductance", "unit": "G0"}, "z": {"role": "displacement", "unit": "nm"}},
    }
})  # fmt: skip


def changed(content: bytes, chance: random.Random) -> bytes:
    """Return bytes with a few of them changed, cut out, put in, or cut off."""
    data = bytearray(content)
    front = min(len(data), 512)
    for _ in range(chance.choice((1, 1, 2, 3, 6))):
        if len(data) < 2:
            break
        at = chance.randrange(front if chance.random() < 0.5 else len(data)) % len(data)
        match chance.randrange(8):
            case 0 | 1:
                data[at] = chance.choice((0, 1, 10, 32, 44, 45, 46, 48, 57, 101, 127, 128, 255))
            case 2:
                data[at] = chance.randrange(256)
            case 3 | 4:
                width, order = chance.choice((2, 4, 4, 8)), chance.choice("<>")
                at -= at % width if chance.random() < 0.7 else 0
                number = chance.choice((*NUMBERS, len(data), len(data) + 1, len(data) // 2)) % (1 << 8 * width)
                raw = number.to_bytes(width, "little" if order == "<" else "big")
                data[at : at + width] = raw[: len(data) - at]
            case 5:
                del data[at : at + chance.choice((1, 2, 4, 8, 60))]
            case 6:
                data[at:at] = data[at : at + chance.choice((1, 4, 8, 60))]
            case 7:
                if chance.random() < 0.5:
                    del data[at:]
                else:
                    data[at : at + 16] = bytes(16)
    return bytes(data)


class _Terminal:
    """What is written to the terminal by anything in this process, libraries in C included."""

    def __init__(self) -> None:
        self._own = os.fdopen(os.dup(2), "w")
        self._file = tempfile.TemporaryFile()  # noqa: SIM115
        os.dup2(self._file.fileno(), 2)

    def words(self) -> str:
        """Return what was written since the last call."""
        sys.stderr.flush()
        self._file.seek(0)
        found = self._file.read().decode(errors="replace")
        self._file.seek(0)
        self._file.truncate()
        return found

    def close(self) -> None:
        """Let errors go where they belong again."""
        os.dup2(self._own.fileno(), 2)


class _TooLongError(Exception):
    """A read took more than a few seconds."""


def _stop(_: int, __: object) -> None:
    raise _TooLongError


def tried(path: Path, form: str, number: int) -> str:
    """Return what came of a mutant: "read", "refused", or a fault in words."""
    recipe = BINARY if form == "binary" else Recipe()
    signal.setitimer(signal.ITIMER_PROF, MOST_SECONDS)  # of work, however busy the machine
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            if number % 4 == 0:
                intake.describe([path], recipe)
            return "read" if intake.read(path, recipe).traces > 0 else "no traces and no error"
    except MesetaError as error:
        return "refused" if str(error) and "\n" not in str(error) and error.where else f"no clear error: {error!r}"
    except BaseException:
        return traceback.format_exc()
    finally:
        signal.setitimer(signal.ITIMER_PROF, 0)


def peak_megabyte() -> int:
    """Return the most memory this process held; what the one that started it held is not part of it, where told."""
    status = Path("/proc/self/status")
    if status.exists():
        return int(status.read_text().split("VmHWM:")[1].split()[0]) // 1024
    return int(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss // 1024)


def main() -> int:
    """Run the campaign and print what came of it."""
    call = argparse.ArgumentParser()
    call.add_argument("--each", type=int, default=500)
    call.add_argument("--seed", type=int, default=1)
    call.add_argument("--forms", nargs="*")
    call.add_argument("--keep", type=Path)
    call.add_argument("--large", action="store_true", help="let small files be treated like large ones")
    told = call.parse_args()
    if told.large:
        _treat_as_large()
    resource.setrlimit(resource.RLIMIT_AS, (MOST_BYTE, MOST_BYTE))
    signal.signal(signal.SIGPROF, _stop)
    faults, terminal = 0, _Terminal()
    for form in told.forms or FORMS:
        name, content, finish = FORMS[form]
        counts = {"read": 0, "refused": 0}
        with tempfile.TemporaryDirectory() as folder:
            for number in range(told.each):
                mutant = finish(changed(content, random.Random(f"{told.seed} {form} {number}")))
                path = Path(folder) / name
                path.write_bytes(mutant)
                if told.keep:
                    (told.keep / "last").write_bytes(mutant)
                outcome = tried(path, form, number)
                if words := terminal.words():
                    outcome = f"words on the terminal: {words[:300]}"
                if outcome in counts:
                    counts[outcome] += 1
                    continue
                faults += 1
                print(f"--- {form}, mutant {number}: {outcome}", flush=True)
                if told.keep:
                    (told.keep / f"{form} {number} {name}".replace(" ", "_")).write_bytes(mutant)
        print(form, counts, flush=True)
    terminal.close()
    print("peak", peak_megabyte(), "MB; faults", faults)
    return 1 if faults else 0


def _treat_as_large() -> None:
    from meseta.intake.readers import hdf5_samples, igor, mat, numpy_files, text

    for module in (mat, igor, numpy_files, text):
        module.LARGE_BYTE = 100  # type: ignore[attr-defined]
    mat.SMALL_BYTE, hdf5_samples.CACHED_BYTE = 8, 100  # type: ignore[misc]


if __name__ == "__main__":
    sys.exit(main())
