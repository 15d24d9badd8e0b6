"""Names, units and metadata as people write them."""

from __future__ import annotations

import json
from importlib.metadata import EntryPoint

import numpy as np
import pytest

from meseta import intake
from meseta.errors import InputError
from meseta.intake import registry
from meseta.intake.meaning.metadata import canonical, canonical_entry
from meseta.intake.meaning.name_template import from_name
from meseta.intake.meaning.roles import guess_role, stem_of
from meseta.intake.meaning.units import parse_unit, unit_factor
from meseta.intake.readers.contents import Contents, make_channel, whole
from meseta.recipe import Recipe
from meseta.traces import ArraySamples

TABLE = "displacement_nm,current_nA\n" + "".join(f"{0.01 * n:.2f},{100.0 / (n + 1):.6g}\n" for n in range(50))


@pytest.mark.parametrize(
    ("text", "base", "factor"),
    [
        ("nA", "A", 1e-9),
        ("µA", "A", 1e-6),  # micro sign U+00B5
        ("μA", "A", 1e-6),  # Greek mu U+03BC
        ("V/nA", "V/A", 1e9),
        ("nS", "S", 1e-9),
        ("G0", "S", 7.748091729863649e-05),  # CODATA 2022
        ("2e2/h", "G0", 1.0),
        ("Å", "nm", 0.1),
        ("Å", "nm", 0.1),  # the angstrom sign U+212B
        ("ms", "s", 1e-3),
        ("MΩ", "ohm", 1e6),
        ("nm s-1", "nm/s", 1.0),
        ("log10(G/G0)", "dec", 1.0),
    ],
)
def test_units_as_people_write_them(text, base, factor):
    assert unit_factor(text, base) == pytest.approx(factor, rel=1e-12)


def test_an_unknown_unit_names_the_nearest():
    with pytest.raises(InputError, match="did you mean"):
        parse_unit("nAA")
    with pytest.raises(InputError, match="does not fit"):
        unit_factor("nA", "nm")


@pytest.mark.parametrize(
    ("name", "role", "unit"),
    [
        ("Current (nA)", "current", "nA"),
        ("I/nA", "current", "nA"),
        ("G/G0", "conductance", "G/G0"),
        ("log10(G/G0)", "log_conductance", "log10(G/G0)"),
        ("conductance_s", "conductance", "S"),
        ("time_s", "time", "s"),
        ("z [Å]", "displacement", "Å"),
        ("Piezo (nm)", "displacement", "nm"),
        ("piezo_V", "piezo", "V"),
        ("trace_12 (G0)", "conductance", "G0"),
        ("gate_V", "other", "V"),
        ("noise floor remarks", "other", ""),
    ],
)
def test_headings(name, role, unit):
    guess = guess_role(name)
    assert (guess.role, guess.unit) == (role, unit)


def test_a_number_anywhere_in_a_heading_counts_traces():
    assert {stem_of(f"trace_{n}_conductance_G0") for n in range(12)} == {"trace_conductance"}


@pytest.mark.parametrize(
    ("name", "value", "expected"),
    [
        ("bias_mV", 100, ("bias_volt", 0.1)),
        ("Bias", "100 mV", ("bias_volt", 0.1)),
        ("Gain (V/nA)", 1e-3, ("gain_volt_per_ampere", 1e6)),
        ("Gain", "1e6 V/A", ("gain_volt_per_ampere", 1e6)),
        ("speed_nm_s", 20, ("nm_per_second", 20.0)),
        ("nm_per_V", 2, ("nm_per_volt", 2.0)),
        ("sampling_rate_khz", 20, ("sampling_hertz", 20_000.0)),
        ("molecule", "first", ("molecule", "first")),
    ],
)
def test_constants(name, value, expected):
    assert canonical_entry(name, value)[:2] == expected


def test_a_bias_without_a_unit_is_doubted_and_an_impossible_one_not_used():
    assert "taken as V" in canonical({"bias": 0.1})[1][0]
    found, doubts = canonical({"bias": 100})
    assert "bias_volt" not in found
    assert "cannot be volts" in doubts[0]


def test_metadata_from_names_sidecars_and_tables(tmp_path):
    for n, bias in ((1, 50), (2, 100)):
        (tmp_path / f"chip7_{bias}mV_{n}.csv").write_text(TABLE)
    (tmp_path / "chip7_50mV_1.json").write_text(json.dumps({"solvent": "none", "setup": {"temperature": "300 K"}}))
    table = tmp_path / "about.txt"
    table.write_text("file,molecule\nchip7_50mV_1.csv,first\nchip7_100mV_2.csv,second\n")
    settings = {"name_template": "{specimen}_{bias_mV}mV_{n}.csv", "metadata_table": str(table)}
    traces = intake.read(str(tmp_path / "chip7*.csv"), Recipe.build({"intake": settings}))
    assert traces.table["specimen"].tolist() == ["chip7", "chip7"]
    assert traces.table["bias_volt"].tolist() == [0.05, 0.1]
    assert traces.table["molecule"].tolist() == ["first", "second"]
    assert traces.table["solvent"].tolist() == ["none", ""]
    expected = 100e-9 / (0.05 * 7.748091729863649e-05)
    assert traces.trace_conductance(0)[0] == pytest.approx(expected, rel=1e-6)


def test_a_name_that_does_not_fit_its_template_is_an_error():
    with pytest.raises(InputError, match="does not fit the template"):
        from_name("other.csv", "{specimen}_{n}.csv")


def test_a_remembered_layout_that_does_not_fit_says_how_it_differs(tmp_path):
    (tmp_path / "a.csv").write_text(TABLE)
    roles = {"strom": {"role": "current", "unit": "nA"}}
    with pytest.raises(InputError, match="it has no 'strom', but 'displacement_nm', 'current_nA'"):
        intake.read(
            tmp_path / "a.csv", Recipe.build({"intake": {"channels": roles}, "calibration": {"bias_volt": 0.1}})
        )


def test_description_is_whole_and_plain(tmp_path):
    (tmp_path / "a.csv").write_text("# bias: 0.1\n" + TABLE)
    described, bad = intake.describe(tmp_path / "a.csv")
    plain = json.loads(json.dumps(described[0].as_dict(), allow_nan=False))
    assert bad == []
    assert plain["traces"] == 1
    assert [channel["role"] for channel in plain["channels"]] == ["displacement", "current"]
    assert any("taken as V" in doubt for doubt in plain["doubts"])
    text = "\n".join(described[0].lines())
    assert "bias_volt = 0.1" in text
    assert "taken as V" in text


def test_description_of_a_file_that_lacks_a_constant_says_what_to_give(tmp_path):
    (tmp_path / "a.csv").write_text(TABLE)
    described, _ = intake.describe(tmp_path / "a.csv")
    assert "calibration.bias_volt" in described[0].problem
    assert described[0].traces == 0


@pytest.mark.parametrize(
    ("headings", "role"),
    [
        ([f"log10(G/G0) {n}" for n in range(4)], "log_conductance"),
        (["log10(G/G0)"] * 4, "log_conductance"),
        ([f"trace {n} log10(G/G0)" for n in range(4)], "log_conductance"),
        ([f"R {n} (Mohm)" for n in range(4)], "resistance"),
        ([f"R (Mohm) {n}" for n in range(4)], "resistance"),
        ([f"Conductance (mS) {n}" for n in range(4)], "conductance"),
    ],
)
def test_side_by_side_traces_keep_the_unit_of_their_headings(tmp_path, headings, role):
    # 2 Mohm and 2 mS by CODATA 2022: 12906.403... ohm is 1 / G0.
    stored = -2.0 if role == "log_conductance" else 2.0
    lines = ["z (nm)," + ",".join(headings)] + [f"{0.01 * n:.2f}" + f",{stored}" * 4 for n in range(50)]
    (tmp_path / "wide.csv").write_text("\n".join(lines) + "\n")
    traces = intake.read([str(tmp_path / "wide.csv")], Recipe())
    g0_ohm = 12906.40372
    conductance = {"log_conductance": 1e-2, "resistance": g0_ohm / 2e6, "conductance": 2e-3 * g0_ohm}[role]
    assert traces.traces == 4
    assert traces.conductance == pytest.approx(conductance, rel=1e-6)


def test_a_unit_in_an_entry_of_its_own_belongs_to_its_value():
    said = {"gain": 1, "gain_unit": "V/nA", "bias": 100.0, "Bias Units": "mV", "speed": 5, "speed_unit": "parsec"}
    found, doubts = canonical(said)
    assert (found["gain_volt_per_ampere"], found["bias_volt"]) == (1e9, 0.1)
    assert doubts == ["the unit of 'speed' is not stated: 5 is taken as nm/s"]


@pytest.mark.parametrize(
    ("ending", "text"),
    [
        (".json", '{"set-up": {"bias": "100 mV", "molecule": "M1"}}'),
        (".toml", 'bias_mV = 100\n[sample]\nmolecule = "M1"\n'),
        (".ini", "[set-up]\nbias = 100 mV\nmolecule = M1\n"),
        (".yaml", '# by hand\nset-up:\n  bias: 100 mV\n  molecule: "M1"  # pure\n  run: !!python/name:os.system\n'),
    ],
)
def test_sidecars_names_and_tables_become_columns(tmp_path, ending, text):
    (tmp_path / "chip3_t1.csv").write_text(TABLE)
    (tmp_path / f"chip3_t1{ending}").write_text(text)
    (tmp_path / "about.md").write_text("nothing\n")
    (tmp_path / "table.csv.txt").write_text("file;solvent;temperature_K\nchip3_t1.csv;mesitylene;293\n")
    recipe = {"name_template": "{specimen}_t{n}.csv", "metadata_table": str(tmp_path / "table.csv.txt")}
    traces = intake.read(tmp_path / "chip3_t1.csv", Recipe.build({"intake": recipe}))
    row = {name: traces.table[name][0] for name in ("bias_volt", "molecule", "specimen", "n", "solvent")}
    assert row == {"bias_volt": 0.1, "molecule": "M1", "specimen": "chip3", "n": 1, "solvent": "mesitylene"}


class _Words:
    """A reader as another package would bring it: one number a line, written as a word."""

    name = "words"

    def sniff(self, head, path):
        return head.startswith(b"WORDS")

    def open(self, path, settings):
        numbers = {"two": 2.0, "one": 1.0, "tenth": 0.1}
        values = np.array([numbers[word] for word in path.read_text().split()[1:]])
        channel = make_channel("conductance", ArraySamples(values), values.dtype, unit="G0")
        return Contents("words", (channel,), *whole(len(values)))


def test_a_reader_of_another_package_is_found_and_a_broken_one_harms_nothing(tmp_path, monkeypatch):
    points = [
        EntryPoint("words", f"{__name__}:_Words", "meseta.readers"),
        EntryPoint("lost", "no_such_module:Reader", "meseta.readers"),
    ]
    monkeypatch.setattr(registry, "entry_points", lambda group: points)
    monkeypatch.setattr(EntryPoint, "load", lambda point: _Words if point.name == "words" else __import__("no_such"))
    registry.readers.cache_clear()
    try:
        (tmp_path / "a.txt").write_text("WORDS two two one tenth\n")
        (tmp_path / "b.csv").write_text("z_nm,G_G0\n" + "".join(f"{n},{1 / (n + 1)}\n" for n in range(9)))
        np.testing.assert_array_equal(intake.read(tmp_path / "a.txt").conductance, np.float32([2, 2, 1, 0.1]))
        assert intake.read(tmp_path / "b.csv").sources[0].reader == "text"
        with pytest.raises(InputError, match="'lost' cannot be loaded"):
            intake.read(tmp_path / "b.csv", Recipe.build({"intake": {"reader": "lost"}}))
    finally:
        registry.readers.cache_clear()


@pytest.mark.parametrize("heading", ["log G [G0]", "log G (2e2/h)", "logG/G0"])
def test_a_logarithm_headed_with_the_unit_of_its_argument_is_a_logarithm(heading, tmp_path):
    path = tmp_path / "trace.csv"
    conductance = np.geomspace(5.0, 1e-5, 200)
    rows = "".join(f"{0.01 * n:.2f};{np.log10(g):.7f}\n" for n, g in enumerate(conductance))
    path.write_text(f"displacement [nm];{heading}\n{rows}", encoding="utf-8")
    np.testing.assert_allclose(intake.read(path).conductance, conductance, rtol=2e-6)


def test_the_logarithm_of_a_conductance_in_siemens_is_doubted():
    (doubt,) = guess_role("log G [nS]").doubts
    assert "named like log_conductance" in doubt
