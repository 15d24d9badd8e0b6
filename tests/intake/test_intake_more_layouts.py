"""More layouts and encodings as laboratories write them, made by other people's libraries with known calibration.

Each must give conductance and displacement to the rounding of float32, without a script: h5py with hdf5plugin, scipy,
npTDMS, numpy, the csv module, and text put together by hand.
"""

from __future__ import annotations

import bz2
import csv
import warnings
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import hdf5plugin
import nptdms
import numpy as np
import pytest
import scipy.io
from test_intake_layouts import SAMPLES, STEP_NM, TRACES, G, Z, lines

from meseta import intake
from meseta.recipe import Recipe

G0_SIEMENS = 7.748091729863649e-05  # CODATA 2022
T = np.arange(SAMPLES) * 1e-4
BIAS, GAIN = 0.1, 1e6
CURRENT = G.astype(float) * BIAS * G0_SIEMENS
CASES: list[Callable[[Path], tuple[Any, ...]]] = []


def rows(template: str) -> str:
    """Return a line for each sample of the first trace: {z} and {g}, and {n} counted from 0."""
    return "".join(template.format(n=n, z=float(z), g=float(g)) for n, (z, g) in enumerate(zip(Z, G[0], strict=True)))


def case(write: Callable[[Path], tuple[Any, ...]]) -> Callable[[Path], tuple[Any, ...]]:
    """Add a layout: it writes into a folder and returns path, recipe, traces (or their lengths), and other values."""
    CASES.append(write)
    return write


def wr(path: Path, text: str, encoding: str = "utf-8") -> Path:
    with path.open("w", encoding=encoding, newline="") as file:
        file.write(text)
    return path


# -- texts ----------------------------------------------------------------------------------------------------
@case
def units_row_semicolon_decimal_comma_german(d):
    wr(
        d / "a.csv",
        "Zeit;Piezo;Strom\ns;V;V\n" + lines("", np.column_stack([T, Z / 5, CURRENT[0] * GAIN]), ";", ","),
        "latin-1",
    )
    return d / "a.csv", {"calibration": {"bias_volt": BIAS, "gain_volt_per_ampere": GAIN, "nm_per_volt": 5.0}}, 1


@case
def units_row_brackets(d):
    wr(d / "a.csv", "t,z,I\n[s],[nm],[nA]\n" + lines("", np.column_stack([T, Z, CURRENT[0] * 1e9])))
    return d / "a.csv", {"calibration": {"bias_volt": BIAS}}, 1


@case
def header_lines_many_colon_tab(d):
    wr(
        d / "a.txt",
        "Measured: 2024-01-01\nBias:\t100 mV\nOperator:\tX\n\n\nDistance (nm)\tConductance (G0)\n"
        + lines("", np.column_stack([Z, G[0]]), "\t"),
    )
    return d / "a.txt", {}, 1


@case
def percent_comment_header(d):
    wr(d / "a.dat", "% bias_V = 0.1\n% z (Å)   I (nA)\n" + lines("", np.column_stack([Z * 10, CURRENT[0] * 1e9]), "  "))
    return d / "a.dat", {}, 1


@case
def quoted_cells(d):
    with (d / "q.csv").open("w", newline="") as f:
        w = csv.writer(f, quoting=csv.QUOTE_ALL)
        w.writerow(["displacement, nm", "G/G0"])
        [w.writerow([repr(float(a)), repr(float(b))]) for a, b in zip(Z, G[0], strict=True)]
    return d / "q.csv", {}, 1


@case
def quoted_strings_only(d):
    with (d / "q.csv").open("w", newline="") as f:
        w = csv.writer(f, quoting=csv.QUOTE_NONNUMERIC, delimiter=";")
        w.writerow(["displacement (nm)", "G (G0)"])
        [w.writerow([float(a), float(b)]) for a, b in zip(Z, G[0], strict=True)]
    return d / "q.csv", {}, 1


@case
def utf16be_bom_semicolon(d):
    (d / "a.csv").write_bytes(
        b"\xfe\xff"
        + ("z (µm);G (G0)\r\n" + lines("", np.column_stack([Z * 1e-3, G[0]]), ";", ",").replace("\n", "\r\n")).encode(
            "utf-16-be"
        )
    )
    return d / "a.csv", {}, 1


@case
def utf16le_nobom(d):
    (d / "a.csv").write_bytes(("z (nm),G (G0)\n" + lines("", np.column_stack([Z, G[0]]))).encode("utf-16-le"))
    return d / "a.csv", {}, 1


@case
def latin1_micro(d):
    wr(
        d / "a.csv",
        "Abstand [nm];Strom [µA]\n" + lines("", np.column_stack([Z, CURRENT[0] * 1e6]), ";", ","),
        "latin-1",
    )
    return d / "a.csv", {"calibration": {"bias_volt": BIAS}}, 1


@case
def cr_only(d):
    (d / "a.txt").write_bytes(
        ("z_nm\tG_G0\r" + lines("", np.column_stack([Z, G[0]]), "\t").replace("\n", "\r")).encode()
    )
    return d / "a.txt", {}, 1


@case
def fixed_width_aligned(d):
    (d / "a.txt").write_text(
        "    z_nm            G_G0\n" + "".join(f"{a:12.6f} {float(b)!r:>28}\n" for a, b in zip(Z, G[0], strict=True))
    )
    return d / "a.txt", {}, 1


@case
def fortran_exponents(d):
    (d / "a.txt").write_text(
        "z_nm G_G0\n"
        + "".join(f"{a:.6f} {(f'{float(b):.9e}').replace('e', 'D')}\n" for a, b in zip(Z, G[0], strict=True))
    )
    return d / "a.txt", {}, 1


@case
def plus_signs(d):
    (d / "a.txt").write_text("z_nm,G_G0\n" + rows("{z:+.6f},{g:+.9e}\n"))
    return d / "a.txt", {}, 1


@case
def trailing_delimiter(d):
    wr(d / "a.csv", "z_nm,G_G0,\n" + "".join(f"{float(a)!r},{float(b)!r},\n" for a, b in zip(Z, G[0], strict=True)))
    return d / "a.csv", {}, 1


@case
def leading_index_column(d):
    wr(
        d / "a.csv",
        ",z_nm,G_G0\n" + rows("{n},{z!r},{g!r}\n"),
    )
    return d / "a.csv", {}, 1


@case
def repeated_header_with_units_row_blocks(d):
    wr(d / "a.csv", "".join(lines("z,G\nnm,G0\n", np.column_stack([Z, r])) for r in G))
    return d / "a.csv", {}, TRACES


@case
def comment_between_traces(d):
    wr(
        d / "a.txt",
        "".join(
            lines(f"# trace {k + 1}\n" if k else "# z_nm G_G0\n# trace 1\n", np.column_stack([Z, r]), " ")
            for k, r in enumerate(G)
        ),
    )
    return d / "a.txt", {}, TRACES


@case
def header_names_between_blank(d):
    wr(
        d / "a.txt",
        "\n".join(lines(f"Trace {k + 1}\nz (nm)\tG (G0)\n", np.column_stack([Z, r]), "\t") for k, r in enumerate(G)),
    )
    return d / "a.txt", {}, TRACES


@case
def ragged_blank_blocks(d):
    wr(
        d / "a.txt",
        "z_nm,G_G0\n" + "\n".join(lines("", np.column_stack([Z, r])[: 300 + 20 * k]) for k, r in enumerate(G)),
    )
    return d / "a.txt", {}, [300 + 20 * k for k in range(TRACES)]


@case
def nan_rows_csv(d):
    wr(d / "a.csv", "z_nm,G_G0\n" + "NaN,NaN\n".join(lines("", np.column_stack([Z, r])) for r in G))
    return d / "a.csv", {}, TRACES


@case
def empty_cells_rows(d):
    wr(d / "a.csv", "z_nm,G_G0\n" + ",\n".join(lines("", np.column_stack([Z, r])) for r in G))
    return d / "a.csv", {}, TRACES


@case
def wide_no_axis(d):
    wr(d / "a.csv", ",".join(f"G{k + 1} (G0)" for k in range(TRACES)) + "\n" + lines("", G.T))
    return d / "a.csv", {"calibration": {"nm_per_sample": STEP_NM}}, TRACES


@case
def wide_ragged(d):
    n = [SAMPLES - 10 * k for k in range(TRACES)]
    cells = [
        [repr(float(row[i])) if i < count else "" for row, count in zip(G, n, strict=True)] for i in range(SAMPLES)
    ]
    rows_ = [",".join([repr(float(z)), *row]) for z, row in zip(Z, cells, strict=True)]
    wr(
        d / "a.csv",
        "z (nm)," + ",".join(f"trace {k + 1} (G0)" for k in range(TRACES)) + "\n" + "\n".join(rows_) + "\n",
    )
    return d / "a.csv", {}, n


@case
def time_reset_current(d):
    wr(d / "a.csv", "time (s),current (nA)\n" + lines("", np.column_stack([np.tile(T, TRACES), CURRENT.ravel() * 1e9])))
    return d / "a.csv", {"calibration": {"bias_volt": BIAS, "nm_per_second": 50.0}}, TRACES


@case
def long_cycle_direction_text(d):
    wr(
        d / "a.csv",
        "cycle,z_nm,G_G0\n"
        + lines("", np.column_stack([np.repeat(np.arange(TRACES), SAMPLES) + 5, np.tile(Z, TRACES), G.ravel()])),
    )
    return d / "a.csv", {}, TRACES


@case
def bz2_member(d):
    with bz2.open(d / "a.csv.bz2", "wt") as f:
        f.write("z_nm,G_G0\n" + lines("", np.column_stack([Z, G[0]])))
    return d / "a.csv.bz2", {}, 1


@case
def zip_many_members(d):
    with zipfile.ZipFile(d / "a.zip", "w") as z:
        for k in range(TRACES):
            z.writestr(f"t{k + 1}.csv", "z_nm,G_G0\n" + lines("", np.column_stack([Z, G[k]])))
    return d / "a.zip", {}, TRACES


@case
def logg_comma(d):
    wr(
        d / "a.csv",
        "z (nm),log10(G/G0)\n" + lines("", np.column_stack([Z, np.log10(np.maximum(G[0].astype(float), 1e-30))])),
    )
    return d / "a.csv", {}, 1


@case
def resistance_kohm(d):
    wr(
        d / "a.csv",
        "z (nm),R (kΩ)\n"
        + lines("", np.column_stack([Z, 1e-3 / (np.maximum(G[0].astype(float), 1e-30) * G0_SIEMENS)])),
    )
    return d / "a.csv", {}, 1


@case
def thousands_no(d):
    wr(d / "a.txt", "x/nm y/nS\n" + lines("", np.column_stack([Z, G[0] * G0_SIEMENS * 1e9]), " "))
    return d / "a.txt", {}, 1


@case
def metadata_block_ini_like(d):
    wr(
        d / "a.csv",
        "[Header]\nBias=0.1 V\nGain=1e6 V/A\nSpeed=50 nm/s\nSamplingRate=10000 Hz\n[Data]\nt_s,amplifier_V\n"
        + lines("", np.column_stack([T, CURRENT[0] * GAIN])),
    )
    return d / "a.csv", {}, 1


# -- arrays ---------------------------------------------------------------------------------------------------
@case
def h5_transposed_axis(d):
    with h5py.File(d / "a.h5", "w") as f:
        f["G"] = G.T
        f["G"].attrs["unit"] = "G0"
        f["z"] = Z
        f["z"].attrs["unit"] = "nm"
    return d / "a.h5", {}, TRACES


@case
def h5_equal_traces_no_axis_rows(d):
    with h5py.File(d / "a.h5", "w") as f:
        f["conductance"] = G
        f["conductance"].attrs["units"] = "G0"
        f.attrs["nm_per_sample"] = STEP_NM
    return d / "a.h5", {}, TRACES


@case
def h5_equal_traces_no_axis_cols(d):
    with h5py.File(d / "a.h5", "w") as f:
        f["conductance"] = G.T
        f["conductance"].attrs["units"] = "G0"
        f.attrs["nm_per_sample"] = STEP_NM
    return d / "a.h5", {}, TRACES


@case
def h5_square_no_axis(d):
    g = np.repeat(G, 100, 0)[:SAMPLES]
    with h5py.File(d / "a.h5", "w") as f:
        f["conductance"] = g
        f["conductance"].attrs["units"] = "G0"
        f.attrs["nm_per_sample"] = STEP_NM
    return d / "a.h5", {}, [SAMPLES] * SAMPLES, g


@case
def h5_square_no_axis_T(d):
    g = np.repeat(G, 100, 0)[:SAMPLES]
    with h5py.File(d / "a.h5", "w") as f:
        f["conductance"] = g.T
        f["conductance"].attrs["units"] = "G0"
        f.attrs["nm_per_sample"] = STEP_NM
    return d / "a.h5", {}, [SAMPLES] * SAMPLES, g


@case
def h5_vlen(d):
    with h5py.File(d / "a.h5", "w") as f:
        ds = f.create_dataset("conductance", (TRACES,), h5py.vlen_dtype("f4"))
        dz = f.create_dataset("displacement", (TRACES,), h5py.vlen_dtype("f8"))
        for k in range(TRACES):
            ds[k] = G[k]
            dz[k] = Z
        ds.attrs["unit"] = "G0"
        dz.attrs["unit"] = "nm"
    return d / "a.h5", {}, TRACES


@case
def h5_int16_counts_big_endian(d):
    sc = 10 / 32768
    with h5py.File(d / "a.h5", "w") as f:
        v = f.create_dataset("amplifier", data=np.round(CURRENT * GAIN / 4 / sc).astype(">i2"))
        v.attrs.update(unit="V", scale_factor=sc, add_offset=0.0)
        f["z"] = Z
        f["z"].attrs["unit"] = "nm"
        f.attrs.update(bias_mV=100.0, gain_V_per_A=GAIN / 4)
    return (
        d / "a.h5",
        {},
        TRACES,
        (np.round(CURRENT * GAIN / 4 / sc) * sc * 4 / GAIN / (BIAS * G0_SIEMENS)).astype("f4"),
    )


@case
def h5_lz4(d):
    return plug(d, hdf5plugin.LZ4())


@case
def h5_blosc2(d):
    return plug(d, hdf5plugin.Blosc2())


@case
def h5_blosc(d):
    return plug(d, hdf5plugin.Blosc())


@case
def h5_zstd(d):
    return plug(d, hdf5plugin.Zstd())


@case
def h5_bitshuffle(d):
    return plug(d, hdf5plugin.Bitshuffle())


@case
def h5_bz2(d):
    return plug(d, hdf5plugin.BZip2())


def plug(d, k):
    with h5py.File(d / "a.h5", "w") as f:
        f.create_dataset("G_G0", data=G, chunks=(2, 200), **k)
        f["z_nm"] = Z
    return d / "a.h5", {}, TRACES


@case
def h5_scaleoffset_fletcher(d):
    with h5py.File(d / "a.h5", "w") as f:
        f.create_dataset("G_G0", data=G, chunks=(2, 200), fletcher32=True, shuffle=True, compression="gzip")
        f["z_nm"] = Z
    return d / "a.h5", {}, TRACES


@case
def h5_offsets_starts_stops(d):
    with h5py.File(d / "a.h5", "w") as f:
        f["G_G0"] = G.ravel()
        f["z_nm"] = np.tile(Z, TRACES)
        f["starts"] = np.arange(TRACES) * SAMPLES
        f["stops"] = (1 + np.arange(TRACES)) * SAMPLES
    return d / "a.h5", {}, TRACES


@case
def h5_index_table(d):
    with h5py.File(d / "a.h5", "w") as f:
        f["data/G_G0"] = G.ravel()
        f["data/z_nm"] = np.tile(Z, TRACES)
        f["index/trace_lengths"] = np.full(TRACES, SAMPLES)
    return d / "a.h5", {}, TRACES


@case
def h5_deep_nesting(d):
    with h5py.File(d / "a.h5", "w") as f:
        for k in range(TRACES):
            g = f.create_group(f"entry/2024/run_{k // 3}/trace_{k:03d}/data")
            g["current"] = CURRENT[k]
            g["current"].attrs["units"] = "A"
            g["z"] = Z
            g["z"].attrs["units"] = "nm"
        f["entry"].attrs["bias"] = "100 mV"
    return d / "a.h5", {}, TRACES


@case
def h5_compound_per_trace(d):
    with h5py.File(d / "a.h5", "w") as f:
        for k in range(TRACES):
            r = np.zeros(SAMPLES, [("z_nm", "f8"), ("G_G0", "f4")])
            r["z_nm"] = Z
            r["G_G0"] = G[k]
            f[f"traces/t{k + 1}"] = r
    return d / "a.h5", {}, TRACES


@case
def h5_traces_channels_samples_3d(d):
    with h5py.File(d / "a.h5", "w") as f:
        f["data"] = np.stack([np.tile(Z, (TRACES, 1)), G], 1)
        f["data"].attrs["channels"] = ["displacement_nm", "conductance_G0"]
    return d / "a.h5", {}, TRACES


@case
def h5_2d_named_columns_per_trace(d):
    with h5py.File(d / "a.h5", "w") as f:
        for k in range(TRACES):
            x = f.create_dataset(f"t/{k}", data=np.column_stack([Z, G[k]]))
            x.attrs["columns"] = ["z_nm", "G_G0"]
    return d / "a.h5", {}, TRACES


@case
def h5_2xN_per_trace_noname(d):
    with h5py.File(d / "a.h5", "w") as f:
        for k in range(TRACES):
            f[f"t/{k}"] = np.stack([Z, G[k]])
    return (
        d / "a.h5",
        {
            "intake": {
                "channels": {
                    "column 1": {"role": "displacement", "unit": "nm"},
                    "column 2": {"role": "conductance", "unit": "G0"},
                }
            }
        },
        TRACES,
    )


@case
def h5_float16_bool(d):
    with h5py.File(d / "a.h5", "w") as f:
        f["G_G0"] = G.astype("f2")
        f["z_nm"] = Z
        f["good"] = np.ones(TRACES, bool)
    return d / "a.h5", {}, TRACES, G.astype("f2").astype("f4")


@case
def mat73_like(d):
    with h5py.File(d / "a.mat", "w", userblock_size=512) as f:
        f["G"] = G.T.astype("f8")
        f["z"] = Z.reshape(-1, 1)
        f["G"].attrs["MATLAB_class"] = np.bytes_("double")
    b = bytearray((d / "a.mat").read_bytes())
    b[:116] = b"MATLAB 7.3 MAT-file".ljust(116)
    (d / "a.mat").write_bytes(bytes(b))
    return (
        d / "a.mat",
        {
            "intake": {
                "channels": {"G": {"role": "conductance", "unit": "G0"}, "z": {"role": "displacement", "unit": "nm"}}
            }
        },
        TRACES,
    )


@case
def mat5_v4like_uncompressed_columns(d):
    scipy.io.savemat(d / "a.mat", {"G_G0": G.T, "z_nm": Z[:, None], "bias_mV": 100.0})
    return d / "a.mat", {}, TRACES


@case
def mat5_struct(d):
    scipy.io.savemat(d / "a.mat", {"rec": {"I_nA": CURRENT * 1e9, "z_nm": Z, "bias": {"bias_V": BIAS}}})
    return d / "a.mat", {}, TRACES


@case
def mat5_cells(d):
    c = np.empty(TRACES, object)
    z = np.empty(TRACES, object)
    for k in range(TRACES):
        c[k] = G[k]
        z[k] = Z
    scipy.io.savemat(d / "a.mat", {"conductance_G0": c, "displacement_nm": z})
    return d / "a.mat", {}, TRACES


@case
def mat5_int(d):
    scipy.io.savemat(
        d / "a.mat", {"conductance_G0": G[0].astype("f8"), "displacement_nm": np.round(Z * 1000).astype("int16") / 1000}
    )
    return d / "a.mat", {}, 1


@case
def npy_2cols(d):
    np.save(d / "a.npy", np.column_stack([Z, G[0]]))
    return (
        d / "a.npy",
        {
            "intake": {
                "channels": {
                    "column 1": {"role": "displacement", "unit": "nm"},
                    "column 2": {"role": "conductance", "unit": "G0"},
                }
            }
        },
        1,
    )


@case
def npy_structured(d):
    r = np.zeros(SAMPLES, [("z_nm", "f8"), ("G_G0", "f4")])
    r["z_nm"] = Z
    r["G_G0"] = G[0]
    np.save(d / "a.npy", r)
    return d / "a.npy", {}, 1


@case
def npz_per_trace(d):
    np.savez(d / "a.npz", **{f"G_G0_{k}": G[k] for k in range(TRACES)}, **{f"z_nm_{k}": Z for k in range(TRACES)})
    return d / "a.npz", {}, TRACES


@case
def npz_ragged_offsets(d):
    np.savez(
        d / "a.npz",
        conductance_G0=G.ravel(),
        displacement_nm=np.tile(Z, TRACES),
        offsets=np.arange(TRACES + 1) * SAMPLES,
    )
    return d / "a.npz", {}, TRACES


@case
def tdms_waveform_props(d):
    with nptdms.TdmsWriter(d / "a.tdms") as w:
        w.write_segment(
            [
                nptdms.RootObject({"bias_V": BIAS}),
                nptdms.ChannelObject(
                    "run", "current", CURRENT[0], {"unit_string": "A", "wf_increment": 1e-4, "wf_start_offset": 0.0}
                ),
                nptdms.ChannelObject("run", "displacement", Z, {"unit_string": "nm", "wf_increment": 1e-4}),
            ]
        )
    return d / "a.tdms", {}, 1


@case
def tdms_numbered_channels(d):
    with nptdms.TdmsWriter(d / "a.tdms") as w:
        w.write_segment(
            [
                c
                for k in range(TRACES)
                for c in (
                    nptdms.ChannelObject("run", f"G_{k}", G[k], {"unit_string": "G0"}),
                    nptdms.ChannelObject("run", f"z_{k}", Z, {"unit_string": "nm"}),
                )
            ]
        )
    return d / "a.tdms", {}, TRACES


@case
def tdms_linear_scale(d):
    raw = np.round(CURRENT[0] * GAIN / 1e-7).astype("i4")
    with nptdms.TdmsWriter(d / "a.tdms") as w:
        w.write_segment(
            [
                nptdms.ChannelObject(
                    "run",
                    "amplifier",
                    raw,
                    {
                        "unit_string": "V",
                        "NI_Number_Of_Scales": 1,
                        "NI_Scaling_Status": "unscaled",
                        "NI_Scale[0]_Scale_Type": "Linear",
                        "NI_Scale[0]_Linear_Slope": 1e-7,
                        "NI_Scale[0]_Linear_Y_Intercept": 0.0,
                        "NI_Scale[0]_Linear_Input_Source": 0xFFFFFFFF,
                    },
                ),
                nptdms.ChannelObject("run", "z", Z, {"unit_string": "nm"}),
            ]
        )
    return (
        d / "a.tdms",
        {"calibration": {"bias_volt": BIAS, "gain_volt_per_ampere": GAIN}},
        1,
        (raw * 1e-7 / GAIN / BIAS / G0_SIEMENS).astype("f4"),
    )


@pytest.mark.parametrize("write", CASES, ids=lambda write: write.__name__)
def test_known_conductance_and_displacement_come_back(write, tmp_path):
    path, recipe, traces, *other = write(tmp_path)
    lengths = [SAMPLES] * traces if isinstance(traces, int) else traces
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        read = intake.read(path, Recipe.build(recipe))
    assert read.lengths.tolist() == lengths
    rows = np.atleast_2d(other[0]) if other else G
    expected = np.concatenate([rows[place][:n] for place, n in enumerate(lengths)])
    usable = expected > 0 if write.__name__ in ("logg_comma", "resistance_kohm") else np.ones(len(expected), bool)
    np.testing.assert_allclose(read.conductance[usable], expected[usable], rtol=3e-7, atol=1e-12)
    assert read.drive.unit == "nm"
    axes = np.concatenate([Z[:n] for n in lengths])
    np.testing.assert_allclose(read.drive_values(0, read.traces), axes, atol=4e-7)
    assert set(read.table["direction"]) == {"opening"}


def test_values_that_change_from_block_to_block_belong_to_their_traces(tmp_path):
    """Each block states its own bias; a block that states none has that of the file's head."""
    heads = ["bias_mV: 100\nz_nm,I_nA\n", "bias_mV: 200\nz_nm,I_nA\n", "z_nm,I_nA\n"]
    (tmp_path / "a.csv").write_text(
        "".join(lines(h, np.column_stack([Z, r * 1e9])) for h, r in zip(heads, CURRENT, strict=False))
    )
    traces = intake.read(tmp_path / "a.csv")
    assert traces.table["bias_volt"].tolist() == [0.1, 0.2, 0.1]
    np.testing.assert_allclose(traces.conductance, np.concatenate([G[0], G[1] / 2, G[2]]), rtol=3e-7)


def test_what_groups_far_apart_say_belongs_to_their_traces(tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as file:
        for specimen, bias in (("chip A", 0.1), ("chip B", 0.2)):
            home = file.create_group(specimen)
            home.attrs["bias_V"] = bias
            for trace in range(2):
                group = home.create_group(f"pull {trace}")
                group["current"], group["z_nm"] = CURRENT[trace], Z
                group["current"].attrs["units"] = "A"
                group.attrs["solvent"] = f"solvent {trace}"
        file["raw/chip A/pull 0/current"] = CURRENT[0] * 5
        file["raw/chip A/pull 0/z_nm"] = Z
    traces = intake.read(tmp_path / "a.h5")
    assert traces.table["bias_volt"].tolist() == [0.1, 0.1, 0.2, 0.2]
    assert traces.table["solvent"].tolist() == ["solvent 0", "solvent 1"] * 2
    np.testing.assert_allclose(traces.conductance, np.concatenate([G[0], G[1], G[0] / 2, G[1] / 2]), rtol=3e-7)
    assert any("not used: /raw/chip A" in text for text in traces.notes["assumptions"])


def test_damaged_members_of_a_zip_are_named_and_the_others_taken(tmp_path):
    with zipfile.ZipFile(tmp_path / "a.zip", "w") as archive:
        archive.writestr("t10.csv", lines("z_nm,G_G0\n", np.column_stack([Z, G[1]])))
        archive.writestr("t2.csv", lines("z_nm,G_G0\n", np.column_stack([Z, G[0]])))
        archive.writestr("t3.csv", "z_nm,G_G0\n1,x\n2,3\n4,5\n")
        archive.writestr("t4.csv", "time_s,force\n1,2\n2,3\n4,5\n")
    traces = intake.read(tmp_path / "a.zip")
    assert traces.table["dataset"].tolist() == ["t2.csv", "t10.csv"]
    np.testing.assert_array_equal(traces.conductance, G[:2].ravel())
    said = " ".join(traces.notes["assumptions"])
    assert "'t3.csv' in it" in said
    assert "'t4.csv' in it has other channels" in said


def test_a_square_of_noise_is_taken_one_way_with_a_doubt(tmp_path):
    np.save(tmp_path / "conductance_G0.npy", np.random.default_rng(3).normal(size=(60, 60)))
    said = " ".join(intake.read(tmp_path / "conductance_G0.npy").notes["assumptions"])
    assert "not clear whether traces are its rows or its columns" in said
