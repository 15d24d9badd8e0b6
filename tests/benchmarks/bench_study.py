"""The study file at full size: opening, working through, saving; against h5py's own reading of the same file.

    python tests/benchmarks/bench_study.py [--samples 500000000]

The study has traces of 5,000 samples and one channel (500 million samples are 2 GB on disk, in a temporary folder).
Memory is the peak resident memory of a process of its own, less what it had after its imports.
"""

from __future__ import annotations

import argparse
import resource
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np

LENGTH = 5_000


@dataclass(frozen=True)
class Repeated:
    """Samples that repeat one block (see meseta.traces.Samples)."""

    block: np.ndarray
    length: int

    def __len__(self) -> int:
        return self.length

    def read(self, start: int, stop: int) -> np.ndarray:
        return self.block[np.arange(start, stop) % len(self.block)]


def block() -> np.ndarray:
    rng = np.random.default_rng(1)
    return (10 ** (1 - 7 * np.linspace(0, 1, LENGTH * 20)) * rng.lognormal(0, 0.05, LENGTH * 20)).astype(np.float32)


def build(path: Path, samples: int) -> None:
    from meseta.analysis import Analysis
    from meseta.study import write_study
    from meseta.traces import Channel, Drive, PhaseTable, Source, TraceSet, trace_table

    traces = samples // LENGTH
    lengths = np.full(traces, LENGTH, np.int64)
    table = trace_table(traces, record_start=np.arange(traces) * LENGTH, specimen="tip 1")
    made = TraceSet(
        offsets=np.arange(traces + 1, dtype=np.int64) * LENGTH,
        channels={"conductance": Channel(Repeated(block(), samples), "G0")},
        drive=Drive(np.zeros(traces), np.full(traces, 0.001), "nm"),
        phases=PhaseTable.whole(lengths, table["direction"]),
        table=table,
        sources=(Source("0" * 64, "made up", 0, "arrays", ""),),
        key="bench",
    )
    write_study(path, Analysis(made))


def resident_mb() -> float:
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmRSS"):
            return int(line.split()[1]) / 1024
    return float("nan")


def measure(path: Path) -> None:
    """Open and work through the study, and print the figures (in a process of its own)."""
    import h5py

    import meseta.analysis  # noqa: F401  # part of the baseline
    from meseta.study import Study
    from meseta.work import Work

    baseline = resident_mb()
    begin = time.perf_counter()
    study = Study.open(path)
    opened = time.perf_counter() - begin
    begin = time.perf_counter()
    traces = study.traces()
    total, work = 0.0, Work()
    for part in traces.each_block(work):
        total += float(part.conductance.sum(dtype=np.float64))
    worked = time.perf_counter() - begin
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    begin = time.perf_counter()
    for number in range(20):
        study.reject(traces_some(traces, number), f"bench {len(study.history.entries)}")
    decided = (time.perf_counter() - begin) / 20
    begin = time.perf_counter()
    study.save()
    saved = time.perf_counter() - begin
    study.close()
    begin = time.perf_counter()
    plain, step = 0.0, 2_000_000
    with h5py.File(path, "r") as root:
        data = root["traces/channels/conductance"]
        for start in range(0, len(data), step):
            plain += float(data[start : start + step].sum(dtype=np.float64))
    bare = time.perf_counter() - begin
    assert abs(total - plain) <= 1e-9 * plain
    expected = float(block().sum(dtype=np.float64)) * (traces.samples / len(block()))
    assert abs(total - expected) <= 1e-6 * expected
    print(f"{traces.samples / 1e6:.0f} million samples, {len(traces)} traces, {path.stat().st_size / 1e9:.2f} GB")
    print(f"open                         {opened:8.3f} s   (at most 1 s)")
    print(f"worked through, checksummed  {worked:8.3f} s   {worked / bare:.2f} x h5py's bare reading ({bare:.3f} s)")
    print(f"memory                       baseline {baseline:.0f} MB + {peak - baseline:.0f} MB   (at most + 300 MB)")
    print(f"one decision, durable        {decided * 1e3:8.1f} ms")
    print(f"save                         {saved * 1e3:8.1f} ms")


def traces_some(traces, number: int) -> list[str]:
    return [traces.identity(row).text() for row in range(number * 5, number * 5 + 5)]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--samples", type=int, default=500_000_000)
    parser.add_argument("--measure", type=Path, help=argparse.SUPPRESS)
    given = parser.parse_args()
    if given.measure is not None:
        measure(given.measure)
        return
    with tempfile.TemporaryDirectory(prefix="meseta-bench-") as folder:
        path = Path(folder) / "study.h5"
        begin = time.perf_counter()
        build(path, given.samples)
        print(f"written in {time.perf_counter() - begin:.1f} s")
        for _ in range(2):  # the second time the file is in the system's cache
            subprocess.run([sys.executable, __file__, "--measure", str(path)], check=True)


if __name__ == "__main__":
    main()
