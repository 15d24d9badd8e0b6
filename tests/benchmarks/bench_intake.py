"""Reading against the bare parse: CSV files against pyarrow, one HDF5 file against h5py.

The ratio is taken with the checksum left out (it is replaced by a constant for that measurement); the time with it, as
every user has it, and the time of the checksums alone stand beside it.

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
import pyarrow as pa
from pyarrow import csv

from meseta import intake
from meseta.intake import opening, reading
from meseta.intake.readers import unpack
from meseta.work import Work

SAMPLES, ROUNDS = 5000, 5


def best(functions: dict[str, Callable[[], object]]) -> dict[str, float]:
    """Return the best time of each function in seconds, one after the other in every round."""
    found = dict.fromkeys(functions, float("inf"))
    for _ in range(ROUNDS):
        for name, function in functions.items():
            begun = time.perf_counter()
            function()
            found[name] = min(found[name], time.perf_counter() - begun)
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


def read_hdf5(path: Path) -> np.ndarray:
    with h5py.File(path) as file:
        return file["conductance"][()]


def report(label: str, times: dict[str, float]) -> None:
    print(
        f"{label}: bare {times['bare']:.3f} s, without checksum {times['plain']:.3f} s, with it {times['meseta']:.3f} s"
        f" (checksums alone {times['checksum']:.3f} s); ratio without checksum {times['plain'] / times['bare']:.2f}"
        f" (aim 1.5), with it {times['meseta'] / times['bare']:.2f}"
    )


def main(traces: int) -> None:
    rng = np.random.default_rng(0)
    values = np.exp(rng.normal(-5, 3, (traces, SAMPLES))).astype(np.float32)
    axis = np.round(np.arange(SAMPLES) * 0.002, 6)
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        with h5py.File(folder / "rows.h5", "w") as file:
            file.create_dataset("conductance", data=values).attrs["unit"] = "G0"
            file.create_dataset("displacement", data=axis).attrs["unit"] = "nm"
        few = folder / "tables"
        few.mkdir()
        for trace in range(traces // 5):
            table = pa.table({"displacement_nm": axis, "conductance_G0": values[trace]})
            csv.write_csv(table, few / f"trace_{trace:05d}.csv")
        paths = sorted(few.glob("*.csv"))
        np.testing.assert_array_equal(intake.read(folder / "rows.h5").conductance, values.ravel())
        np.testing.assert_array_equal(intake.read(few).conductance, values[: len(paths)].ravel())
        assert intake.read(few).sources[0].sha256 == hashlib.sha256(paths[0].read_bytes()).hexdigest()
        hdf5 = {
            "bare": lambda: read_hdf5(folder / "rows.h5"),
            "plain": lambda: read_without_checksum(folder / "rows.h5"),
            "meseta": lambda: intake.read(folder / "rows.h5"),
            "checksum": lambda: checksum([folder / "rows.h5"]),
        }
        tables = {
            "bare": lambda: parse_csv(paths),
            "plain": lambda: read_without_checksum(few),
            "meseta": lambda: intake.read(few),
            "checksum": lambda: checksum(paths),
        }
        report(f"HDF5, {values.nbytes / 1e6:.0f} MB", best(hdf5))
        report(f"CSV, {len(paths)} files", best(tables))


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 2000)
