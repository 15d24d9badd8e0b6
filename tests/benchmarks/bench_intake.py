"""Reading against the bare parse: CSV files against pyarrow, HDF5 files of several layouts against h5py.

Ratios are taken with the checksum left out (it is replaced by a constant for that measurement); the time with it, as
every user has it, and the time of the checksums alone stand beside them.  Each ratio is given twice: of the clock, and
of the processor time of both threads, which says more on a machine that others use as well.

The number to reach (1.5) is set for CSV files of 5,000 rows and for HDF5 files of float32 and float64.  What else is
measured says what a layout costs: whole numbers become twice as many bytes, columns must be turned, a record with a
drive that goes up and down must be cut.

Run with ``python tests/benchmarks/bench_intake.py [traces]``.  Best of several, interleaved; the answer is asserted.
"""

from __future__ import annotations

import hashlib
import sys
import tempfile
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from unittest.mock import patch

import h5py
import numpy as np
import numpy.typing as npt
import pyarrow as pa
from pyarrow import csv

from meseta import intake
from meseta.intake import opening, reading
from meseta.intake.readers import unpack
from meseta.work import Work

SAMPLES, ROUNDS = 5000, 7
Floats = npt.NDArray[np.float32]


def best(functions: dict[str, Callable[[], object]]) -> dict[str, tuple[float, float]]:
    """Return the best (clock, processor) time of each function in seconds, one after the other in every round."""
    found = dict.fromkeys(functions, (float("inf"), float("inf")))
    for _ in range(ROUNDS):
        for name, function in functions.items():
            clock, processor = time.perf_counter(), time.process_time()
            kept = function()
            clock, processor = time.perf_counter() - clock, time.process_time() - processor
            del kept
            found[name] = (min(found[name][0], clock), min(found[name][1], processor))
    return found


def checksum(paths: list[Path]) -> list[str]:
    return [unpack.sha256_of(path) for path in paths]


def read_without_checksum(path: Path) -> object:
    """Read with checksums that cost nothing."""
    with (
        patch.object(reading, "sha256_of", lambda _: "0"),
        patch.object(opening, "sha256_of", lambda _: "0"),
        patch.object(unpack, "sha256_of_bytes", lambda _: "0"),
    ):
        return intake.read(path)


def parse_csv(paths: list[Path]) -> list[pa.Table]:
    options = csv.ReadOptions(use_threads=False)
    with ThreadPoolExecutor(Work().threads) as pool:
        return list(pool.map(lambda path: csv.read_csv(path, options), paths))


def read_hdf5(path: Path) -> list[npt.NDArray[np.generic]]:
    """Read every dataset of a file, as a script does."""
    found: list[npt.NDArray[np.generic]] = []
    with h5py.File(path) as file:
        file.visititems(lambda _, item: found.append(item[()]) if isinstance(item, h5py.Dataset) else None)
    return found


def report(label: str, times: dict[str, tuple[float, float]]) -> None:
    clock = {name: one[0] for name, one in times.items()}
    ratios = " and ".join(f"{times['plain'][at] / times['bare'][at]:.2f}" for at in (0, 1))
    print(
        f"{label}: bare {clock['bare']:.3f} s, without checksum {clock['plain']:.3f} s, with it {clock['meseta']:.3f} s"
        f" (checksums alone {clock['checksum']:.3f} s); ratio without checksum by clock and processor {ratios}"
    )


def write_hdf5(folder: Path, values: Floats, axis: npt.NDArray[np.float64]) -> dict[str, tuple[Path, Floats | None]]:
    """Return name of the layout -> file, and the conductance that must come back (None where it is another one)."""
    rng = np.random.default_rng(1)
    traces = len(values)
    lengths = rng.integers(SAMPLES - 1000, SAMPLES, traces)
    made: dict[str, tuple[Path, Floats | None]] = {}

    def layout(name: str, expected: Floats | None, fill: Callable[[h5py.File], object]) -> None:
        path = folder / f"{len(made)}.h5"
        with h5py.File(path, "w") as file:
            fill(file)
        made[name] = (path, expected)

    def with_axis(file: h5py.File, name: str, data: npt.NDArray[np.generic], unit: str, **options: object) -> None:
        dataset = file.create_dataset(name, data=data, **options)
        dataset.attrs["unit"] = unit
        if unit == "nA":
            dataset.attrs["scale"], dataset.attrs["bias_mV"] = 0.01, 100.0
        file.create_dataset("displacement", data=axis).attrs["unit"] = "nm"

    def each_dataset(file: h5py.File) -> None:
        for row in range(traces):
            file.create_dataset(f"trace_{row:05d}", data=values[row]).attrs["unit"] = "G0"

    def each_group(file: h5py.File) -> None:
        for row in range(traces):
            group = file.create_group(f"trace_{row:05d}")
            group.create_dataset("conductance", data=values[row]).attrs["unit"] = "G0"
            group.create_dataset("displacement", data=axis.astype(np.float32)).attrs["unit"] = "nm"

    def flat(file: h5py.File) -> None:
        file.create_dataset("conductance", data=values.ravel()[: lengths.sum()]).attrs["unit"] = "G0"
        file.create_dataset("offsets", data=np.concatenate([[0], np.cumsum(lengths)]))

    def ragged(file: h5py.File) -> None:
        dataset = file.create_dataset("conductance", (traces,), dtype=h5py.vlen_dtype(np.float32))
        dataset.attrs["unit"] = "G0"
        for row in range(traces):
            dataset[row] = values[row, : lengths[row]]

    whole = values.ravel()
    counts = np.clip(rng.normal(0, 8000, values.shape), -32768, 32767).astype(np.int16)
    layout("rows of float32", whole, lambda file: with_axis(file, "conductance", values, "G0"))
    layout("rows of float64", whole, lambda file: with_axis(file, "conductance", values.astype(float), "G0"))
    layout("flat with offsets", whole[: lengths.sum()], flat)
    layout(
        "rows of different length",
        np.concatenate([row[:length] for row, length in zip(values, lengths, strict=True)]),
        ragged,
    )
    layout("one dataset a trace", whole, each_dataset)
    layout("one group a trace", whole, each_group)
    layout(
        "packed rows",
        whole,
        lambda file: with_axis(file, "conductance", values, "G0", chunks=(50, SAMPLES), compression=1),
    )
    layout("rows of int16", None, lambda file: with_axis(file, "current", counts, "nA"))
    layout("columns", whole, lambda file: with_axis(file, "conductance", np.ascontiguousarray(values.T), "G0"))
    return made


def write_csv(folder: Path, values: Floats, axis: npt.NDArray[np.float64]) -> list[Path]:
    folder.mkdir()
    for trace, row in enumerate(values):
        table = pa.table({"displacement_nm": axis[: len(row)], "conductance_G0": row})
        csv.write_csv(table, folder / f"trace_{trace:05d}.csv")
    return sorted(folder.glob("*.csv"))


def measured(path: Path, files: list[Path], bare: Callable[[], object]) -> dict[str, tuple[float, float]]:
    return best(
        {
            "bare": bare,
            "plain": lambda: read_without_checksum(path),
            "meseta": lambda: intake.read(path),
            "checksum": lambda: checksum(files),
        }
    )


def main(traces: int) -> None:
    rng = np.random.default_rng(0)
    values = np.exp(rng.normal(-5, 3, (traces, SAMPLES))).astype(np.float32)
    axis = np.round(np.arange(SAMPLES) * 0.002, 6)
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for rows, count in ((SAMPLES, traces // 5), (SAMPLES // 10, traces)):
            few = folder / f"tables of {rows}"
            paths = write_csv(few, values[:count, :rows], axis)
            found = intake.read(few)
            np.testing.assert_array_equal(found.conductance, values[:count, :rows].ravel())
            assert found.sources[0].sha256 == hashlib.sha256(paths[0].read_bytes()).hexdigest()
            report(f"CSV, {count} files of {rows} rows", measured(few, paths, lambda paths=paths: parse_csv(paths)))
        for layout, (path, expected) in write_hdf5(folder, values, axis).items():
            if expected is not None:
                np.testing.assert_array_equal(intake.read(path).conductance, expected)
            label = f"HDF5, {layout}, {path.stat().st_size / 1e6:.0f} MB"
            report(label, measured(path, [path], lambda path=path: read_hdf5(path)))


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 2000)
