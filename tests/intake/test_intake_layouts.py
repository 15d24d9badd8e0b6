"""The same recording in every layout, written by other people's libraries, gives the same conductance and drive."""

from __future__ import annotations

import gzip
import lzma
import zipfile
from collections.abc import Callable
from pathlib import Path

import h5py
import nptdms
import numpy as np
import pytest
import scipy.io

from meseta import intake
from meseta.recipe import Recipe
from meseta.traces import TraceSet

TRACES, SAMPLES, STEP_NM = 6, 400, 0.005


def conductance() -> np.ndarray:
    """(TRACES, SAMPLES) float32: a staircase, a fall and a floor, each trace a little different."""
    rng = np.random.default_rng(20)
    z = np.arange(SAMPLES)
    rows = []
    for trace in range(TRACES):
        stairs = np.where(z < 60 + trace, 2.0, np.where(z < 120 + 3 * trace, 1.0, 0.0))
        fall = np.where(stairs > 0, 0.0, 10 ** (-2 - (z - 120) * STEP_NM * 10))
        rows.append((stairs + fall) * (1 + 0.01 * rng.normal(size=SAMPLES)) + 1e-6 * rng.normal(size=SAMPLES))
    return np.array(rows, np.float32)


G = conductance()
Z = np.round(np.arange(SAMPLES) * STEP_NM, 6)


def lines(header: str, table: np.ndarray, delimiter: str = ",", decimal: str = ".") -> str:
    rows = [delimiter.join(repr(float(cell)).replace(".", decimal) for cell in row) for row in table]
    return header + "\n".join(rows) + "\n"


def single_csv(folder: Path) -> Path:
    for trace in range(TRACES):
        table = np.column_stack([Z, G[trace]])
        (folder / f"trace{trace + 1}.csv").write_text(lines("displacement (nm),G/G0\n", table))
    (folder / "README.txt").write_text("measured with care, 1, 2, 3\n")
    return folder


def wide_semicolon_decimal_comma(folder: Path) -> Path:
    path = folder / "wide.txt"
    header = "z (nm);" + ";".join(f"G_{t} (G0)" for t in range(TRACES)) + "\n"
    path.write_text(lines(header, np.column_stack([Z, *G]), ";", ","), encoding="utf-8-sig")
    return path


def wide_pairs(folder: Path) -> Path:
    path = folder / "pairs.tsv"
    header = "\t".join(f"z_{t}_nm\tG_{t}_G0" for t in range(TRACES)) + "\n"
    table = np.column_stack([column for row in G for column in (Z, row)])
    path.write_text(lines(header, table, "\t"), encoding="utf-16")
    return path


def long_with_units_row(folder: Path) -> Path:
    path = folder / "long.csv"
    table = np.column_stack([np.repeat(np.arange(TRACES), SAMPLES), np.tile(Z, TRACES), G.ravel()])
    path.write_text("set-up: three\ntrace,displacement,conductance\n-,nm,G0\n" + lines("", table), newline="\r\n")
    return path


def blocks_split_by_blank_lines(folder: Path) -> Path:
    path = folder / "blocks.dat.gz"
    blocks = [lines("", np.column_stack([Z, row]), " ") for row in G]
    with gzip.open(path, "wt") as file:
        file.write("# displacement_nm conductance_G0\n" + "\n\n".join(blocks))
    return path


def blocks_split_by_headings(folder: Path) -> Path:
    path = folder / "blocks.csv.xz"
    heading = "displacement_nm,conductance_G0\n"
    with lzma.open(path, "wt") as file:
        file.write("".join(lines(heading, np.column_stack([Z, row])) for row in G))
    return path


def blocks_split_by_nan_rows(folder: Path) -> Path:
    path = folder / "blocks.zip"
    text = "NaN\tNaN\n".join(lines("", np.column_stack([Z, row]), "\t") for row in G)
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("record.txt", "displacement_nm\tconductance_G0\n" + text)
    return path


def siemens_and_angstrom(folder: Path) -> Path:
    path = folder / "units.csv"
    table = np.column_stack([np.repeat(np.arange(TRACES), SAMPLES), np.tile(Z * 10, TRACES)])
    table = np.column_stack([table, G.ravel().astype(float) * 7.748091729863649e-05 * 1e6])
    path.write_text(lines("trace_number;Abstand [Å];conductance [µS]\n", table, ";"), encoding="latin-1")
    return path


def time_resets(folder: Path) -> Path:
    path = folder / "resets.csv"
    seconds = np.tile(np.arange(SAMPLES) * 1e-4, TRACES)
    path.write_text(lines("# speed_nm_per_s = 50\ntime_s,conductance_G0\n", np.column_stack([seconds, G.ravel()])))
    return path


def hdf5_rows(folder: Path) -> Path:
    with h5py.File(folder / "rows.h5", "w") as file:
        file["data/conductance"] = G
        file["data/conductance"].attrs["units"] = "2e2/h"
        file["data/displacement"] = Z
        file["data/displacement"].attrs["units"] = "nm"
    return folder / "rows.h5"


def hdf5_columns_counts(folder: Path) -> Path:
    scale = 2.0 / 2**30
    with h5py.File(folder / "columns.hdf5", "w") as file:
        stored = np.round(G.T.astype(float) / scale).astype(np.int32)
        dataset = file.create_dataset("G", data=stored, chunks=(100, 2), compression="lzf", shuffle=True)
        dataset.attrs.update({"unit": "G0", "scale": scale, "offset": 0.0})
        file.attrs["nm_per_sample"] = STEP_NM
    return folder / "columns.hdf5"


def hdf5_lengths(folder: Path) -> Path:
    with h5py.File(folder / "ragged.h5", "w") as file:
        file["conductance_G0"] = G.ravel()
        file["displacement_nm"] = np.tile(Z, TRACES)
        file["lengths"] = np.full(TRACES, SAMPLES)
    return folder / "ragged.h5"


def hdf5_dataset_a_trace(folder: Path) -> Path:
    with h5py.File(folder / "many.h5", "w") as file:
        for trace in range(TRACES):
            dataset = file.create_dataset(f"conductance/{trace + 1}", data=G[trace])
            dataset.attrs["unit"] = "G0"
            file.create_dataset(f"displacement/{trace + 1}", data=Z).attrs["unit"] = "nm"
    return folder / "many.h5"


def hdf5_group_a_trace(folder: Path) -> Path:
    with h5py.File(folder / "groups.h5", "w") as file:
        for trace in range(TRACES):
            group = file.create_group(f"run/junction {trace + 1}")
            logs = np.log10(np.maximum(G[trace], 1e-30).astype(float))
            group.create_dataset("log10_conductance", data=logs).attrs["unit"] = "log10(G/G0)"
            group.create_dataset("distance (pm)", data=Z * 1000)
    return folder / "groups.h5"


def hdf5_compound(folder: Path) -> Path:
    rows = np.zeros(TRACES * SAMPLES, [("trace", "i4"), ("displacement_nm", "f8"), ("conductance_G0", "f4")])
    rows["trace"], rows["displacement_nm"] = np.repeat(np.arange(TRACES), SAMPLES), np.tile(Z, TRACES)
    rows["conductance_G0"] = G.ravel()
    with h5py.File(folder / "table.h5", "w") as file:
        file["table"] = rows
    return folder / "table.h5"


def numpy_archive(folder: Path) -> Path:
    np.savez_compressed(folder / "a.npz", conductance_G0=G, displacement_nm=Z)
    return folder / "a.npz"


def mat_five(folder: Path) -> Path:
    content = {"conductance_G0": G, "displacement_nm": Z, "operator": "somebody"}
    scipy.io.savemat(folder / "a.mat", content, do_compression=True)
    return folder / "a.mat"


def mat_structures(folder: Path) -> Path:
    cells = np.empty(TRACES, object)
    for trace in range(TRACES):
        cells[trace] = {"conductance_G0": G[trace], "displacement_nm": Z}
    scipy.io.savemat(folder / "b.mat", {"runs": cells})
    return folder / "b.mat"


def tdms_channels(folder: Path) -> Path:
    with nptdms.TdmsWriter(folder / "a.tdms") as writer:
        for trace in range(TRACES):
            group = f"trace {trace + 1}"
            channels = [
                nptdms.ChannelObject(group, "conductance", G[trace], {"unit_string": "G0"}),
                nptdms.ChannelObject(group, "displacement", Z, {"unit_string": "nm"}),
            ]
            writer.write_segment(channels)
    return folder / "a.tdms"


WRITERS: list[Callable[[Path], Path]] = [
    single_csv,
    wide_semicolon_decimal_comma,
    wide_pairs,
    long_with_units_row,
    blocks_split_by_blank_lines,
    blocks_split_by_headings,
    blocks_split_by_nan_rows,
    siemens_and_angstrom,
    time_resets,
    hdf5_rows,
    hdf5_columns_counts,
    hdf5_lengths,
    hdf5_dataset_a_trace,
    hdf5_group_a_trace,
    hdf5_compound,
    numpy_archive,
    mat_five,
    mat_structures,
    tdms_channels,
]
ROUNDED = {"hdf5_columns_counts": 1e-9, "hdf5_group_a_trace": 2e-6}


def assert_same(traces: TraceSet, tolerance: float) -> None:
    assert traces.traces == TRACES
    assert traces.lengths.tolist() == [SAMPLES] * TRACES
    expected = G.ravel()
    read = traces.conductance
    usable = expected > 0 if tolerance > 1e-6 else np.ones(len(expected), bool)
    np.testing.assert_allclose(read[usable], expected[usable], rtol=2e-7, atol=tolerance)
    assert traces.drive.unit == "nm"
    np.testing.assert_allclose(traces.drive_values(0, TRACES), np.tile(Z, TRACES), atol=3e-7)
    assert set(traces.table["direction"]) == {"opening"}


@pytest.mark.parametrize("write", WRITERS, ids=lambda write: write.__name__)
def test_every_layout_gives_the_same_traces(write, tmp_path):
    recipe = Recipe()
    if write is siemens_and_angstrom:
        recipe = Recipe.build({"intake": {"channels": {"Abstand [Å]": {"role": "displacement", "unit": "Å"}}}})
    traces = intake.read(write(tmp_path), recipe)
    assert_same(traces, ROUNDED.get(write.__name__, 0.0))
    assert traces.notes["bad_files"] == []


@pytest.mark.parametrize("order", ["little", "big"])
def test_headerless_binary_is_read_as_the_recipe_says(order, tmp_path):
    table = np.column_stack([np.tile(Z, TRACES), G.ravel(), np.repeat(np.arange(TRACES), SAMPLES)])
    path = tmp_path / "record.bin"
    path.write_bytes(b"head" * 3 + table.astype("<f4" if order == "little" else ">f4").tobytes())
    recipe = Recipe.build(
        {
            "intake": {
                "reader": "binary",
                "binary_type": "float32",
                "binary_order": order,
                "binary_header_byte": 12,
                "binary_channels": ["displacement_nm", "conductance_G0", "trace"],
            }
        }
    )
    assert_same(intake.read(path, recipe), 0.0)


def test_headerless_table_is_read_by_column_numbers(tmp_path):
    path = tmp_path / "bare.txt"
    path.write_text(lines("", np.column_stack([Z, G[0]])))
    with pytest.raises(intake.opening.InputError, match=r"intake\.channels"):
        intake.read(path)
    roles = {"column 1": {"role": "displacement", "unit": "nm"}, "column 2": {"role": "conductance", "unit": "G0"}}
    traces = intake.read(path, Recipe.build({"intake": {"channels": roles}}))
    np.testing.assert_array_equal(traces.conductance, G[0])


def test_key_follows_content_and_calibration_but_not_the_analysis(tmp_path):
    path = hdf5_rows(tmp_path)
    recipe = Recipe()
    key = intake.read(path, recipe).key
    assert intake.read(path, recipe.with_values("histogram", bins_per_decade=30)).key == key
    assert intake.read(path, recipe.with_values("calibration", series_resistance_ohm=100.0)).key != key
