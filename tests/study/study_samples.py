"""Small traces, studies and recordings for the tests of the study file."""

import tempfile
from functools import cache
from itertools import pairwise
from pathlib import Path

import h5py
import numpy as np

from meseta.analysis import Analysis
from meseta.recipe import Recipe
from meseta.selection import Decisions, Event, RemovedRange
from meseta.study import Study, write_study
from meseta.traces import ArraySamples, Channel, Drive, PhaseTable, TraceSet


def plain_traces(count=12, samples=400, seed=1):
    rng = np.random.default_rng(seed)
    rows = [10 ** (1 - np.linspace(0, 6, samples)) * (1 + 0.01 * rng.standard_normal(samples)) for _ in range(count)]
    return TraceSet.from_arrays(rows, step_nm=0.01, molecule=["amine", "thiol", "Größe"] * (count // 3))


def rich_traces(count=40, seed=2):
    """Return traces with everything a TraceSet can have; more than one chunk of samples, traces of length 0 and 1."""
    rng = np.random.default_rng(seed)
    lengths = rng.integers(2, 20_000, count)
    lengths[[3, 7]] = [0, 1]
    offsets = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
    samples = int(offsets[-1])
    conductance = rng.lognormal(-3, 2, samples).astype(np.float32)
    conductance[rng.integers(0, samples, 50)] = np.nan
    base = TraceSet.from_arrays([conductance[a:b] for a, b in pairwise(offsets)], step_nm=0.01)
    return TraceSet(
        offsets=offsets,
        channels={"conductance": Channel.of(conductance, "G0"), "force": Channel.of(rng.random(samples), "nN")},
        drive=Drive(rng.random(count), np.full(count, np.nan), "V", ArraySamples(rng.random(samples, np.float32))),
        phases=PhaseTable(
            np.repeat(np.arange(count), 2),
            np.stack([np.zeros(count, int), lengths // 2], 1).ravel(),
            np.stack([lengths // 2, lengths], 1).ravel(),
            np.tile(np.array([1, 3], np.uint8), count),
        ),
        table={**base.table, "note": np.array(["", "Übergang", "π"] * count)[:count], "good": rng.random(count) > 0.5},
        sources=base.sources,
        key="a key",
        quality=ArraySamples(rng.integers(0, 8, samples).astype(np.uint8)),
        notes={"assumptions": ["one", "two"], "calibration": {"gain": 1e6, "from": "recipe"}},
    )


def some_decisions(traces):
    ids = traces.identities()
    return (
        Decisions()
        .with_verdict(ids[:2], False, "Funken")
        .with_verdict(ids[2:3], True)
        .with_group("good/best", ids[3:6], "#205090", "circle")
        .with_group("empty", [])
        .with_event(Event(ids[6], "drop added", "2026-03-04"))
        .with_removed("f" * 64, RemovedRange("", 3.5, 9.0, "second", "drift"))
    )


@cache
def _study_bytes():
    with tempfile.TemporaryDirectory() as folder:
        _write_study(Path(folder) / "s.h5")
        return (Path(folder) / "s.h5").read_bytes()


def _write_study(path):
    traces = plain_traces()
    recipe = Recipe.preset("molecule").with_settings(['selection.rules=["rupture_found"]'])
    write_study(path, Analysis(traces, recipe, some_decisions(traces)))


def some_study(path, fresh=False):
    """Make a study and open it; a fresh one has its own identity."""
    if fresh:
        _write_study(path)
    else:
        path.write_bytes(_study_bytes())
    return Study.open(path)


def assert_same_traces(first, second):
    """Assert that two sets of traces are the same to the last bit."""
    assert first.key == second.key and first.sources == second.sources and first.notes == second.notes
    assert np.array_equal(first.offsets, second.offsets)
    assert list(first.channels) == list(second.channels)
    for name, channel in first.channels.items():
        assert channel.unit == second.channels[name].unit
        assert first.read(name, 0, len(first)).tobytes() == second.read(name, 0, len(first)).tobytes()
    assert first.drive.unit == second.drive.unit
    assert first.drive_values(0, len(first)).tobytes() == second.drive_values(0, len(first)).tobytes()
    for name in ("trace", "start", "stop", "kind"):
        assert np.array_equal(getattr(first.phases, name), getattr(second.phases, name))
    assert list(first.table) == list(second.table)
    for name, column in first.table.items():
        assert column.dtype.kind == second.table[name].dtype.kind
        assert np.array_equal(column, second.table[name], equal_nan=column.dtype.kind == "f")
    assert (first.quality is None) == (second.quality is None)
    if first.quality is not None:
        assert np.array_equal(first.quality.read(0, first.samples), second.quality.read(0, first.samples))


def write_recording(path, seed=1, traces=4, samples=600, gain=1e6):
    """Write amplifier volts as integers, one group a trace, with the constants of the laboratory as attributes."""
    rng = np.random.default_rng(seed)
    conductance = 10 ** (0.8 - np.linspace(0, 4, samples)) * (1 + 0.02 * rng.standard_normal((traces, samples)))
    volts = conductance * 7.748091729e-5 * 0.1 * gain
    with h5py.File(path, "w") as file:
        for number, row in enumerate(volts):
            stored = np.clip(np.rint(row / 1e-3), -32768, 32767).astype(np.int16)
            made = file.create_dataset(f"trace_{number:03d}/amplifier", data=stored)
            made.attrs["unit"] = "V"
            made.attrs["scale"] = 1e-3
        file.attrs["bias_volt"] = 0.1
        file.attrs["gain_volt_per_ampere"] = gain
        file.attrs["nm_per_sample"] = 0.01
    return path
