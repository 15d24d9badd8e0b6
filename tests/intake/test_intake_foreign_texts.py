"""Texts as other programs and instruments write them: words, time stamps, thousands, two headings, odd encodings.

What is read is checked against the numbers that were written.
"""

import csv
from datetime import datetime, timedelta

import numpy as np
import pytest

from meseta import intake, read
from meseta.errors import InputError
from meseta.intake.readers import text, text_stream
from meseta.quantities import G0_SIEMENS
from meseta.recipe import Recipe

TRACES = 3


def trace(seed, samples=200):
    """Return (displacement in nm, conductance in G0) of one opening."""
    generator = np.random.default_rng(seed)
    displacement = np.arange(samples) * 0.004
    conductance = 4.0 * np.exp(-displacement * 6) * np.exp(generator.normal(0, 0.01, samples)) + 1e-5
    return displacement, conductance


def write(path, columns, *, delimiter=","):
    """Write columns of numbers and words under their names."""
    with path.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file, delimiter=delimiter)
        writer.writerow([name for name, _ in columns])
        writer.writerows(zip(*(np.asarray(values).tolist() for _, values in columns), strict=True))


def stacked(lengths=(200, 230, 260)):
    """Return (traces, number of the trace, displacement, conductance), all traces one after the other."""
    parts = [trace(seed, length) for seed, length in enumerate(lengths)]
    number = np.repeat(np.arange(len(lengths)), lengths)
    return parts, number, np.concatenate([d for d, _ in parts]), np.concatenate([g for _, g in parts])


def said(path, *sets):
    """Return the doubts about a file, as the file check prints them."""
    recipe = Recipe().with_settings(list(sets)) if sets else None
    return [line.strip() for line in intake.describe(str(path), recipe)[0][0].lines() if line.strip().startswith("?")]


def assert_read(path, parts, *sets):
    found = read(path, Recipe().with_settings(list(sets)) if sets else None)
    assert found.traces == len(parts)
    for number, (displacement, conductance) in enumerate(parts):
        np.testing.assert_allclose(found.trace_conductance(number), conductance, rtol=4e-7)
        drive = found.trace_drive(number)
        assert found.drive.unit == "nm"
        np.testing.assert_allclose(drive - drive[0], displacement - displacement[0], atol=2e-6)
    return found


@pytest.mark.parametrize("name", ["", "timestamp"])
def test_time_stamps_beside_numbers_are_the_time_and_said(tmp_path, name):
    displacement, conductance = trace(1)
    first = datetime(2031, 5, 1, 22)
    stamps = [f"{first + n * timedelta(microseconds=50):%Y-%m-%d %H:%M:%S.%f}" for n in range(len(conductance))]
    columns = [(name, stamps), ("displacement_nm", displacement), ("conductance_g0", conductance)]
    write(tmp_path / "a.csv", columns)
    assert_read(tmp_path / "a.csv", [(displacement, conductance)])
    assert any(
        "time stamps: taken as seconds from the first, 2031-05-01 22:00:00" in line for line in said(tmp_path / "a.csv")
    )


def test_time_stamps_are_the_drive_where_there_is_no_other(tmp_path):
    _, conductance = trace(1)
    first = datetime(2031, 12, 31, 23, 59, 59, 995_000)
    stamps = [first + n * timedelta(microseconds=100) for n in range(len(conductance))]  # over midnight
    rows = [f"{stamp:%H:%M:%S.%f},{value!r}\n" for stamp, value in zip(stamps, conductance.tolist(), strict=True)]
    (tmp_path / "a.csv").write_text("clock,conductance (G0)\n" + "".join(rows))
    displacement = np.arange(len(conductance)) * 1e-4 * 20.0
    assert_read(tmp_path / "a.csv", [(displacement, conductance)], "calibration.nm_per_second=20")


def test_a_stamp_that_is_none_is_an_error_with_its_place(tmp_path):
    rows = [f"2031-05-01T22:00:00.{n:06d}Z,{n * 0.01},1.0\n" for n in range(500)]
    rows[450] = "yesterday,0.5,1.0\n"
    (tmp_path / "a.csv").write_text("Time,displacement (nm),conductance (G0)\n" + "".join(rows))
    with pytest.raises(InputError, match=r"line 452: 'yesterday' is not a time stamp .* column 1"):
        read(tmp_path / "a.csv")


def test_words_and_booleans_are_carried_or_said_to_be_left_out(tmp_path):
    parts, number, displacement, conductance = stacked()
    saturated, side = conductance > 3.9, np.where(displacement < 0.1, "left", "right")
    columns = [("trace", number), ("displacement_nm", displacement), ("conductance_g0", conductance)]
    columns += [("saturated", saturated), ("phase", ["pull"] * len(number)), ("side", side)]
    write(tmp_path / "a.csv", [*columns, ("tag", [f"row {n}" for n in range(len(number))])])
    assert_read(tmp_path / "a.csv", parts)
    doubts = "\n".join(said(tmp_path / "a.csv"))
    assert "'saturated' holds true and false: carried as 1 and 0" in doubts
    assert "'phase' is 'pull' in every row" in doubts
    assert "'side' holds words: carried as numbers" in doubts and "('left', 'right')" in doubts
    assert "'tag' holds words" in doubts and "left out" in doubts
    with intake.open_recording(tmp_path / "a.csv") as recording:
        assert recording.metadata["phase"] == "pull"
        by_name = {channel.name: channel.values(0, recording.samples) for channel in recording.channels}
    np.testing.assert_array_equal(by_name["saturated"], saturated)
    np.testing.assert_array_equal(by_name["side"], side == "right")


def test_words_name_the_traces(tmp_path):
    parts, number, displacement, conductance = stacked()
    names = np.array(["first", "second", "third"])[number]
    write(tmp_path / "a.csv", [("trace", names), ("displacement_nm", displacement), ("conductance_g0", conductance)])
    assert_read(tmp_path / "a.csv", parts)


def test_a_rare_word_is_an_error_only_in_a_measured_column(tmp_path):
    displacement, conductance = trace(1)
    cells = [[f"{d!r}", f"{g!r}", ""] for d, g in zip(displacement.tolist(), conductance.tolist(), strict=True)]
    cells[150][2] = "jump"
    write = lambda: (tmp_path / "a.csv").write_text(  # noqa: E731
        "displacement (nm),conductance (G0),remark\n" + "".join(",".join(row) + "\n" for row in cells)
    )
    write()
    assert_read(tmp_path / "a.csv", [(displacement, conductance)])
    assert any("jump" in line and "left out" in line for line in said(tmp_path / "a.csv"))
    cells[150][1] = "jump"
    write()
    with pytest.raises(InputError, match=r"line 152: 'jump' is not a number in column 2"):
        read(tmp_path / "a.csv")


def test_a_text_that_is_no_table_says_line_column_and_word(tmp_path):
    rows = [f"{n},abc,{'x' if n % 2 else n}\n" if n % 3 else f"low,{n},{n}\n" for n in range(1, 40)]
    (tmp_path / "a.csv").write_text("a,b,c\n" + "".join(rows))
    with pytest.raises(InputError, match=r"line 2: .*'abc' .*column 2"):
        read(tmp_path / "a.csv")


@pytest.mark.parametrize("german", [False, True], ids=["1,234.5", "1.234,5"])
def test_thousands_apart_are_read_where_they_are_clear(tmp_path, german):
    displacement, conductance = trace(1)
    picometre, nanoampere = np.round(displacement * 1e3, 1), np.round(conductance * G0_SIEMENS * 0.1 * 1e9, 6)
    rows = [(f"{d:,.1f}", f"{i:,.6f}") for d, i in zip(picometre, nanoampere, strict=True)]
    if german:
        rows = [tuple(cell.translate(str.maketrans(",.", ".,")) for cell in row) for row in rows]
    with (tmp_path / "a.csv").open("w", newline="") as file:
        writer = csv.writer(file, delimiter=";" if german else ",", quoting=csv.QUOTE_MINIMAL)
        writer.writerows([("Displacement (pm)", "Current (nA)"), *rows])
    parts = [(picometre / 1e3, nanoampere * 1e-9 / 0.1 / G0_SIEMENS)]
    assert_read(tmp_path / "a.csv", parts, "calibration.bias_volt=0.1")
    assert any("between thousands" in line for line in said(tmp_path / "a.csv", "calibration.bias_volt=0.1"))


@pytest.mark.parametrize("later", [False, True], ids=["in the first rows", "far down"])
def test_thousands_apart_do_not_lose_the_rows_without_them_nor_those_with_them(tmp_path, later):
    displacement, _ = trace(1, 600)
    picoampere = np.linspace(1.5, 2400.5, 600) if later else np.linspace(2400.5, 1.5, 600)
    rows = [f'{d!r},"{i:,.3f}"\n' for d, i in zip(displacement.tolist(), picoampere.tolist(), strict=True)]
    (tmp_path / "a.csv").write_text("Displacement (nm),Current (pA)\n" + "".join(rows))
    written = np.round(picoampere, 3) * 1e-12 / 0.1 / G0_SIEMENS
    found = read(tmp_path / "a.csv", Recipe().with_settings(["calibration.bias_volt=0.1"]))
    np.testing.assert_allclose(found.trace_conductance(0), written, rtol=4e-7)


def test_commas_that_could_be_either_are_a_doubt(tmp_path):
    rows = "".join(f"{n * 4}\t{1000 + n:,}\n" for n in range(60))
    (tmp_path / "a.txt").write_text("Displacement (pm)\tCurrent (nA)\n" + rows)
    assert any("could part thousands" in line for line in said(tmp_path / "a.txt", "calibration.bias_volt=0.1"))


@pytest.mark.parametrize("word", ["None", "Overload", "OVLD"])
def test_words_for_a_reading_that_was_not_given_are_missing_and_counted(tmp_path, word):
    displacement, conductance = trace(1)
    conductance[[5, 90, 91]] = np.nan
    rows = [
        f"{d!r},{word if np.isnan(g) else repr(g)}\n"
        for d, g in zip(displacement.tolist(), conductance.tolist(), strict=True)
    ]
    (tmp_path / "a.csv").write_text("displacement (nm),conductance (G0)\n" + "".join(rows))
    assert_read(tmp_path / "a.csv", [(displacement, conductance)])
    assert any(
        f"3 cells '{word}' in the place of a number: taken as missing" in line for line in said(tmp_path / "a.csv")
    )


@pytest.mark.parametrize(
    "heading",
    [
        "trace 1,trace 1,trace 2,trace 2\ndisplacement (nm),conductance (G0),displacement (nm),conductance (G0)\n",
        "trace 1,,trace 2,\ndisplacement (nm),conductance (G0),displacement (nm),conductance (G0)\n",
        "displacement_nm,conductance_g0,displacement_nm,conductance_g0\n0,0,1,1\n",
        "displacement_nm,conductance_g0,displacement_nm,conductance_g0\nT1,T1,T2,T2\n",
        "displacement_nm,conductance_g0,displacement_nm,conductance_g0\n",
    ],
    ids=["two levels", "merged cells", "numbers below", "names below", "the same again"],
)
def test_the_same_headings_again_are_another_trace(tmp_path, heading):
    parts = [trace(1), trace(2)]
    rows = zip(*(column.tolist() for part in parts for column in part), strict=True)
    (tmp_path / "a.csv").write_text(heading + "".join(",".join(map(repr, row)) + "\n" for row in rows))
    assert_read(tmp_path / "a.csv", parts)


def test_a_heading_too_many_or_one_too_few_is_understood(tmp_path):
    displacement, conductance = trace(1)
    pairs = list(zip(displacement.tolist(), conductance.tolist(), strict=True))
    (tmp_path / "a.txt").write_text(
        "Version\t2\nChannels\t2\t2\n***End***\nDisplacement (nm)\tConductance (G0)\tComment\n"
        + "".join(f"{d!r}\t{g!r}\n" for d, g in pairs)
    )
    assert_read(tmp_path / "a.txt", [(displacement, conductance)])
    assert any("no numbers stand under the heading 'Comment'" in line for line in said(tmp_path / "a.txt"))
    rows = "".join(f'"{n}" {d!r} {g!r}\n' for n, (d, g) in enumerate(pairs, 1))
    (tmp_path / "b.txt").write_text('"displacement_nm" "conductance_g0"\n' + rows)
    assert_read(tmp_path / "b.txt", [(displacement, conductance)])


def test_rows_of_a_text_are_traces_where_the_layout_says_so(tmp_path):
    parts = [trace(seed) for seed in range(TRACES)]
    rows = ["displacement_nm," + ",".join(map(repr, parts[0][0].tolist()))]
    rows += [f"trace {n}," + ",".join(map(repr, part[1].tolist())) for n, part in enumerate(parts)]
    (tmp_path / "a.csv").write_text("\n".join(rows) + "\n")
    with pytest.raises(InputError, match="'trace'"):  # what the rows hold is not stated
        read(tmp_path / "a.csv", Recipe().with_settings(["intake.layout=rows"]))
    told = 'intake.channels={trace={role="conductance",unit="G0"}}'
    assert_read(tmp_path / "a.csv", parts, "intake.layout=rows", told)


def test_bars_part_cells(tmp_path):
    displacement, conductance = trace(1)
    rows = "".join(f"{d!r}|{g!r}\n" for d, g in zip(displacement.tolist(), conductance.tolist(), strict=True))
    (tmp_path / "a.txt").write_text("displacement (nm)|conductance (G0)\n" + rows)
    assert_read(tmp_path / "a.txt", [(displacement, conductance)])


@pytest.mark.parametrize(
    ("column", "values"),
    [(None, None), ("Index", lambda n, row: row), ("run_id", lambda n, row: 100 + 7 * n)],
    ids=["displacement", "index", "run"],
)
def test_where_the_drive_starts_anew_no_sample_is_lost(tmp_path, column, values):
    parts = [trace(seed, length) for seed, length in enumerate((200, 230, 260))]
    _, _, displacement, conductance = stacked((200, 230, 260))
    columns = [("displacement_nm", displacement), ("conductance_g0", conductance)]
    if column:
        counts = [values(n, row) for n, (part, _) in enumerate(parts) for row in range(len(part))]
        columns.insert(0, (column, counts))
    write(tmp_path / "a.csv", columns)
    found = assert_read(tmp_path / "a.csv", parts)
    assert not found.notes.get("incomplete")


def test_a_count_of_rows_that_starts_anew_parts_traces_without_a_drive(tmp_path):
    parts = [trace(seed, length)[1] for seed, length in enumerate((200, 230))]
    rows = np.concatenate([np.arange(len(part)) for part in parts])
    write(tmp_path / "a.csv", [("Index", rows), ("conductance_g0", np.concatenate(parts))])
    found = read(tmp_path / "a.csv")
    assert [len(found.trace_conductance(n)) for n in range(found.traces)] == [200, 230]
    assert any("'Index' counts the rows and starts anew" in line for line in said(tmp_path / "a.csv"))


@pytest.mark.parametrize(
    ("encoding", "name", "heading", "bias"),
    [
        ("shift-jis", "変位", "変位 [nm],コンダクタンス [G0]\n", ""),
        ("gb18030", "距离", "距离 (nm),电导 (G0)\n", ""),
        ("cp1251", "расстояние", "расстояние (нм),ток (нА)\n", "calibration.bias_volt=0.1"),
        ("latin-1", "Größe", "Größe (nm),Leitfähigkeit (µS)\n", ""),
        ("latin-1", "Opérateur", "# Opérateur: Hélène\nOpérateur (nm),Conductance (G0)\n", ""),
    ],
)
def test_headings_in_older_encodings_are_shown_as_they_were_written(tmp_path, encoding, name, heading, bias):
    rows = "".join(f"{n * 0.01},{np.exp(-n / 20)}\n" for n in range(100))
    (tmp_path / "a.csv").write_bytes((heading + rows).encode(encoding))
    described = intake.describe(str(tmp_path / "a.csv"), Recipe().with_settings([bias]) if bias else None)[0][0]
    assert any(name in line for line in described.lines())
    assert any("not UTF-8: read as" in line for line in described.lines())


@pytest.mark.parametrize(
    ("heading", "factor"),
    # 2 e2/h = 77.48091729 uS is G0 (CODATA 2018)
    [("G (e²/h)", 2.0), ("G (µS)", 77.48091729), ("Проводимость (мкСм)", 77.48091729), ("Conductance (G0) raw", 1.0)],
)
def test_units_of_conductance(tmp_path, heading, factor):
    displacement, conductance = trace(1)
    write(tmp_path / "a.csv", [("displacement (nm)", displacement), (heading, conductance * factor)])
    assert_read(tmp_path / "a.csv", [(displacement, conductance)])


def test_a_logarithm_of_siemens_is_one_of_siemens(tmp_path):
    displacement, conductance = trace(1)
    for unit, factor in (("S", G0_SIEMENS), ("nS", G0_SIEMENS * 1e9), ("G0", 1.0)):
        logarithm = (f"log10(G/{unit})", np.log10(conductance * factor))
        write(tmp_path / "a.csv", [("displacement (nm)", displacement), logarithm])
        found = read(tmp_path / "a.csv")
        np.testing.assert_allclose(found.trace_conductance(0), conductance, rtol=1e-6)


def test_what_is_taken_without_a_unit_is_a_doubt(tmp_path):
    displacement, conductance = trace(1)
    columns = [("displacement (nm)", displacement), ("Log Conductance", np.log10(conductance))]
    write(tmp_path / "a.csv", columns)
    assert "? the unit of 'Log Conductance' is not stated: taken as log10 of G/G0" in said(tmp_path / "a.csv")
    np.savez(tmp_path / "b.npz", amplifier=conductance, piezo=displacement)
    stated = ["calibration.bias_volt=0.1", "calibration.gain_volt_per_ampere=1e5", "calibration.nm_per_volt=2.5"]
    doubts = said(tmp_path / "b.npz", *stated)
    assert "? the unit of 'amplifier' is not stated: taken as V" in doubts
    assert "? the unit of 'piezo' is not stated: taken as V" in doubts


def test_constants_told_by_word_and_unit(tmp_path):
    displacement, conductance = trace(1)
    volts = conductance * G0_SIEMENS * 0.1 * 1e5
    rows = "".join(f"{d!r}\t{v!r}\n" for d, v in zip((displacement / 2.5).tolist(), volts.tolist(), strict=True))
    entries = "Sensitivity: 10 µA/V\nBias voltage: 0.1 V\nPiezo: 2.5 nm/V\n\n"
    (tmp_path / "a.txt").write_text(entries + "Piezo (V)\tVout (V)\n" + rows, encoding="utf-8")
    assert_read(tmp_path / "a.txt", [(displacement, conductance)])
    assert any("'Vout': taken as amplifier volts" in line for line in said(tmp_path / "a.txt"))


def test_a_bare_gain_too_small_for_volts_per_ampere_is_not_used(tmp_path):
    displacement, conductance = trace(1)
    rows = "".join(f"{d!r}\t{v!r}\n" for d, v in zip(displacement.tolist(), conductance.tolist(), strict=True))
    (tmp_path / "a.txt").write_text("Preamp gain: 5\nBias: 100 mV\n\ndisplacement (nm)\tAmplifier (V)\n" + rows)
    with pytest.raises(InputError, match=r"calibration\.gain_volt_per_ampere"):
        read(tmp_path / "a.txt")
    doubts = said(tmp_path / "a.txt", "calibration.gain_volt_per_ampere=1e5")
    assert any("'Preamp gain' is 5 without a unit: not used" in line and "1e5" in line for line in doubts)


def test_a_height_in_a_is_a_length_with_a_doubt(tmp_path):
    displacement, conductance = trace(1)
    write(tmp_path / "a.csv", [("Z_A", displacement * 10), ("G_G0", conductance)])
    assert_read(tmp_path / "a.csv", [(displacement, conductance)])
    assert any("taken as angstrom" in line for line in said(tmp_path / "a.csv"))


def test_numbers_without_a_header_need_only_be_described(tmp_path):
    displacement, conductance = trace(1)
    path = tmp_path / "a.bin"
    path.write_bytes(b"HEAD" + np.column_stack([displacement, conductance]).astype("<f8").tobytes())
    with pytest.raises(InputError, match=r"intake\.binary_type"):
        read(path)
    told = 'intake.channels={z={role="displacement",unit="nm"},g={role="conductance",unit="G0"}}'
    sets = ["intake.binary_type=float64", "intake.binary_header_byte=4", 'intake.binary_channels=["z","g"]', told]
    assert_read(path, [(displacement, conductance)], *sets)


@pytest.mark.parametrize(("mark", "name"), [(b"CDF\x02", "netCDF 3"), (b"PAR1", "Parquet")])
def test_formats_that_are_not_read_are_named(tmp_path, mark, name):
    (tmp_path / "a.nc").write_bytes(mark + bytes(500))
    with pytest.raises(InputError, match=f"is a {name} file"):
        read(tmp_path / "a.nc")


def test_large_texts_with_odd_columns_are_read_like_small_ones(tmp_path, monkeypatch):
    parts, number, displacement, conductance = stacked((400, 430, 460))
    first = datetime(2031, 12, 31, 23, 59, 59, 950_000)
    clock = [f"{first + n * timedelta(microseconds=100):%H:%M:%S.%f}" for n in range(len(number))]
    words = [f"{value!r}" for value in conductance.tolist()]
    words[700] = "OVLD"
    columns = [("trace", np.array(["a", "b", "c"])[number]), ("clock", clock), ("displacement_nm", displacement)]
    columns += [("conductance_g0", words), ("length (pm)", [f"{value * 1e6:,.1f}" for value in displacement])]
    write(tmp_path / "a.csv", columns)
    # a blank line parts no trace here, but makes the rows be parsed in parts
    lines = (tmp_path / "a.csv").read_text().splitlines(keepends=True)
    (tmp_path / "a.csv").write_text("".join([*lines[:401], "\n", *lines[401:]]))
    parts[1][1][300] = np.nan
    whole = assert_read(tmp_path / "a.csv", parts)
    doubts = said(tmp_path / "a.csv")
    with intake.open_recording(tmp_path / "a.csv") as recording:
        seconds = recording.channel("time").values(0, recording.samples)
    np.testing.assert_allclose(seconds, np.arange(len(number)) * 1e-4, atol=1e-9)
    monkeypatch.setattr(text, "LARGE_BYTE", 0)
    monkeypatch.setattr(text_stream, "BLOCK_BYTE", 5000)
    streamed = read(tmp_path / "a.csv")
    assert said(tmp_path / "a.csv") == doubts
    np.testing.assert_array_equal(streamed.conductance, whole.conductance)
    with intake.open_recording(tmp_path / "a.csv") as recording:
        np.testing.assert_array_equal(recording.channel("time").values(0, recording.samples), seconds)
