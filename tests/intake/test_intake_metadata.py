"""Metadata beside recordings: names, sidecars and tables, alone, contradicting each other, and damaged."""

import json

import pytest

from meseta import intake
from meseta.errors import InputError
from meseta.intake.meaning.metadata import canonical
from meseta.intake.meaning.name_template import from_name
from meseta.recipe import Recipe

ROWS = "".join(f"{0.01 * n:.2f},{100 - n}\n" for n in range(50))
TABLE = "displacement_nm,current_nA\n" + ROWS
TEMPLATE = "{specimen}_{bias_mV}mV_{n}.csv"
NAME = "tip_2_100mV_007"


def _read(folder, sidecar=None, table=None, template=None, names=(f"{NAME}.csv",), text=TABLE, **calibration):
    for name in names:
        (folder / name).parent.mkdir(exist_ok=True)
        (folder / name).write_text(text)
    for ending, content in (sidecar or {}).items():
        (folder / f"{NAME}{ending}").write_bytes(content if isinstance(content, bytes) else content.encode())
    settings = {"name_template": template} if template else {}
    if table is not None:
        (folder / "known.csv").write_bytes(table if isinstance(table, bytes) else table.encode())
        settings["metadata_table"] = str(folder / "known.csv")
    return intake.read(folder, Recipe.build({"intake": settings, "calibration": calibration}))


@pytest.mark.parametrize(
    ("name", "template", "said"),
    [
        ("tip_2_100mV_007.csv", TEMPLATE, {"specimen": "tip_2", "bias_mV": 100, "n": 7}),
        ("tip_2_100mV_007.csv", "{specimen}-{n}.csv", None),
        ("tip 1.10/2024.10_0p1V_3.csv", "{specimen}/{session}_{bias}_{n}",
         {"specimen": "tip 1.10", "session": "2024.10", "bias": "0.1V", "n": 3}),
        ("1_0_2.csv", "{specimen}_{n}.csv", {"specimen": "1_0", "n": 2}),
        ("sub_x/tip_1.csv", "{specimen}_{n}.csv", {"specimen": "tip", "n": 1}),
        ("A_1p5_nan.csv", "{molecule}_{length}_{word}.csv", {"molecule": "A", "length": 1.5, "word": "nan"}),
    ],
)  # fmt: skip
def test_words_of_a_template_that_are_numbers_take_numbers_alone(name, template, said):
    if said is None:
        with pytest.raises(InputError, match="does not fit the template"):
            from_name(name, template)
    else:
        assert from_name(name, template) == (said, [])


def test_a_name_that_can_be_read_in_two_ways_is_doubted():
    found, doubts = from_name("a_b_c.csv", "{specimen}_{kind}.csv")
    assert found == {"specimen": "a", "kind": "b_c"}
    assert "'a', which is used, or 'a_b'" in doubts[0]


@pytest.mark.parametrize("template", ["plain.csv", "{a}{b}.csv", "{a b}_{n}.csv", "{a}_{a}.csv"])
def test_what_is_no_template_is_refused(template):
    with pytest.raises(InputError, match=r"intake\.name_template"):
        from_name("a_1.csv", template)


@pytest.mark.parametrize(
    ("sources", "bias", "doubt"),
    [
        ({"text": "# bias: 50 mV\n" + TABLE, "template": TEMPLATE}, 0.1, "0.05 by the file itself and 0.1 by its name"),
        ({"sidecar": {".json": '{"bias_volt": 0.2}'}, "template": TEMPLATE}, 0.1, "0.2 by the file of metadata beside"),
        ({"template": TEMPLATE, "table": f"file,bias\n{NAME}.csv,300 mV\n"}, 0.3, "0.3 by the table of metadata"),
        ({"template": TEMPLATE, "bias_volt": 0.4}, 0.4, "stated as 0.1, the recipe says 0.4 (calibration.bias_volt)"),
        ({"sidecar": {".json": '{"bias": "100 mV", "bias_mV": 200}'}}, 0.2, "stated as 0.1 and as 0.2"),
    ],
)
def test_the_later_source_wins_and_the_contradiction_is_said(tmp_path, sources, bias, doubt):
    traces = _read(tmp_path, **sources)
    assert traces.table["bias_volt"].tolist() == [bias]
    assert any(doubt in one for one in traces.notes["assumptions"])
    assert traces.notes["calibration"]["bias_volt"]["value"] == bias


def test_sources_that_agree_raise_no_doubt(tmp_path):
    traces = _read(tmp_path, {".json": '{"bias": "0.1 V"}'}, f"file,bias_mV\n{NAME}.csv,100\n", TEMPLATE, bias_volt=0.1)
    assert traces.notes["assumptions"] == []


@pytest.mark.parametrize(
    ("ending", "content", "said"),
    [
        (".json", b"[1, 2]", InputError("names with values are due")),
        (".json", b'{"bias":', InputError("cannot be understood")),
        (".toml", bytes(range(256)), InputError("is no text in UTF-8")),
        (".json", b"[" * 100_000, InputError("cannot be understood")),
        (".json", b'{"bias": "100 mVV"}', InputError("'mVV' is not a known unit -> did you mean 'mV'?")),
        (".ini", b"bias (mVV) = 100\n", InputError("'mVV' is not a known unit -> did you mean 'mV'?")),
        (".ini", b"bias = high\n", InputError("'high' is not a number")),
        (".ini", b"sampling rate = 10,000 Hz\n", InputError("may have a decimal comma or one between thousands")),
        (".json", b'{"x": "' + b"x" * (1 << 20) + b'"}', "it is larger than 1 MB"),
        (".json", b'{"a": {"q": 1}, "b": {"q": 2}}', "'q' stands there more than once: 1 is used"),
        (".json", b'{"list": [1, 2]}', "'list' is not used"),
        (".yaml", b"run: !!python/object/apply:os.system [x]\nother: *b\n", "'run', 'other' are not used"),
        (".yaml", b"note: |\n  bias: 5 V\nlast: 1\n", "'note' is not used"),
        (".ini", b"speed = 5 nm/parsec\n", "'nm/parsec' is not a known unit; did you mean 'nm/s'?"),
    ],
)
def test_nothing_in_a_sidecar_is_passed_over_in_silence(tmp_path, ending, content, said):
    if isinstance(said, InputError):
        with pytest.raises(InputError) as raised:
            _read(tmp_path, {ending: content}, template=TEMPLATE)
        assert said.what in str(raised.value)
        assert NAME in raised.value.where
    else:
        traces = _read(tmp_path, {ending: content}, template=TEMPLATE)
        assert any(said in one for one in traces.notes["assumptions"])
        assert traces.table["bias_volt"].tolist() == [0.1]


def test_a_sidecar_is_not_said_to_be_passed_over(tmp_path):
    (tmp_path / "other.json").write_text("{}")
    traces = _read(tmp_path, {".json": '{"molecule": "M"}'}, template=TEMPLATE)
    assert traces.notes["passed_over"] == ["other.json"]


def test_yaml_quotes_remarks_and_anchors(tmp_path):
    text = 'bias: &b 100 mV  # small\n"molecule": "M: 1 # x"  # pure\nspecimen: 1.10\nempty: ~\n'
    table = _read(tmp_path, {".yaml": text}).table
    assert [table[name][0] for name in ("bias_volt", "molecule", "specimen")] == [0.1, "M: 1 # x", "1.10"]


@pytest.mark.parametrize(
    "content",
    [
        f'\ufeff"File";"bias (mV)";"x";"solvent"\r\n"{NAME}.csv";100,5;1,25;"Äther; b"\r\n'.encode(),
        f"file\tbias\tx\tsolvent\n{NAME}.csv\t100,5 mV\t1.25\tÄther; b\n".encode("utf-16"),
        f"file name,bias_mV,x,solvent\n{NAME},100.5,1.25,Äther; b\n".encode("latin-1"),
    ],
)
def test_tables_as_spreadsheets_write_them(tmp_path, content):
    traces = _read(tmp_path, table=content)
    row = {name: traces.table[name][0] for name in ("bias_volt", "x", "solvent")}
    assert row == {"bias_volt": 0.1005, "x": 1.25, "solvent": "Äther; b"}
    assert traces.traces == 1  # the table lies in the folder and is no recording
    assert traces.notes["bad_files"] == []


@pytest.mark.parametrize(
    ("content", "fault"),
    [
        ("file,bias,specimen\nx.csv,0,1,tip\n", "a row has 4 cells, the heading 3"),
        ("file,bias\nx.csv,1\nx.csv,2\n", "says different things of 'x.csv'"),
        ("file,bias,bias\nx.csv,1,2\n", "two columns of one name"),
        ("name,bias\nx.csv,1\n", "has no column 'file'"),
        ("", "has no column 'file'"),
        ("file,bias\n", "has no rows"),
        (bytes(range(256)), "it holds NUL bytes"),
        (f"file,bias_mV\n{NAME}.csv,abc\n", "'abc' is not a number"),
    ],
)
def test_a_wrong_table_is_refused(tmp_path, content, fault):
    with pytest.raises(InputError, match=fault):
        _read(tmp_path, table=content)


def test_rows_and_files_without_each_other_are_said(tmp_path):
    traces = _read(tmp_path, table="file,molecule\ngone.csv,M\n", template=TEMPLATE)
    assert any("not in the table" in one for one in traces.notes["assumptions"])
    assert any("belong to no file given: gone.csv" in one for one in traces.notes["assumptions"])


def test_files_of_one_name_in_several_folders_need_the_folder_in_the_table(tmp_path):
    names = ("a/1.csv", "b/1.csv")
    traces = _read(tmp_path, table="file,bias_mV\na\\1.csv,50\nb/1.csv,100\n", names=names)
    assert traces.table["bias_volt"].tolist() == [0.05, 0.1]
    assert traces.notes["calibration"]["bias_volt"]["value"] == [0.05, 0.1]
    assert traces.notes["assumptions"] == []
    traces = _read(tmp_path, table="file,bias_mV\n1.csv,50\n", names=names)
    assert "fits files of several folders" in traces.notes["assumptions"][0]


def test_temperature_speed_and_gain_are_columns_with_the_values_used(tmp_path):
    text = json.dumps({"temperature": "25 °C", "speed": "12 nm/s", "gain": "1 V/nA", "room": "B 3"})
    table = _read(tmp_path, {".json": text}, template=TEMPLATE).table
    shown = [table[name][0] for name in ("temperature_kelvin", "nm_per_second", "gain_volt_per_ampere", "room")]
    assert shown == [
        298.15,
        12.0,
        1e9,
        "B 3",
    ]  # 0 °C is 273.15 K by the definition of the Celsius scale (BIPM, SI brochure)


@pytest.mark.parametrize(
    ("entries", "key", "value"),
    [
        ({"temperature (°C)": -10}, "temperature_kelvin", 263.15),
        ({"temperature_C": "25"}, "temperature_kelvin", 298.15),
        ({"temperature": "300 K"}, "temperature_kelvin", 300.0),
        ({"temperature": "room"}, "temperature", "room"),
        ({"sampling_rate": "1,000,000 Hz"}, "sampling_hertz", 1e6),
        ({"bias": "0,125 V"}, "bias_volt", 0.125),
    ],
)
def test_numbers_as_people_write_them(entries, key, value):
    assert canonical(entries)[0][key] == value


def test_folders_of_a_template_are_found_for_a_file_that_is_given_alone(tmp_path):
    (tmp_path / "tip 3").mkdir()
    (tmp_path / "tip 3" / "100mV_1.csv").write_text(TABLE)
    recipe = Recipe.build({"intake": {"name_template": "{specimen}/{bias_mV}mV_{n}.csv"}})
    for given in (tmp_path, tmp_path / "tip 3" / "100mV_1.csv"):
        assert intake.read(given, recipe).table["specimen"].tolist() == ["tip 3"]
