"""Many small files read together give what each of them gives alone."""

from __future__ import annotations

import gzip
import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meseta import intake
from meseta.errors import InputError
from meseta.intake import registry
from meseta.intake.readers.text_kernels import single_blanks
from meseta.intake.readers.text_rows import numbers, numbers_of_each
from meseta.intake.readers.text_search import find_form
from meseta.recipe import Recipe

FILES = 40
HEADING = "displacement_nm,conductance_G0\n"


def _rows(number: int, count: int = 60) -> list[tuple[float, float]]:
    rng = np.random.default_rng(number)
    return list(zip(np.arange(count) * 0.01, np.exp(rng.normal(-3, 2, count)), strict=True))


def _plain(number: int, heading: str = HEADING, delimiter: str = ",") -> str:
    return heading + "".join(f"{z:.4g}{delimiter}{g:.6g}\n" for z, g in _rows(number))


def _line_with(text: str, line: int, instead: str) -> str:
    lines = text.splitlines(keepends=True)
    lines[line] = instead
    return "".join(lines)


ODD = {
    "another heading": lambda n: _plain(n, "z_nm,G_G0\n"),
    "another unit": lambda n: _plain(n, "displacement (Å),conductance (nS)\n"),
    "unit row": lambda n: _plain(n, "displacement,conductance\nÅ,nS\n"),
    "decimal comma": lambda n: _plain(n, HEADING.replace(",", ";"), ";").replace(".", ","),
    "the same heading, decimal comma behind whole numbers": lambda n: (
        _line_with(_plain(n, HEADING.replace(",", ";"), ";"), 1, "0;1\n").replace(".", ",")
    ),
    "metadata before": lambda n: "# specimen: B7\n# bias: 120 mV\n" + _plain(n),
    "blanks": lambda n: _plain(n, HEADING.replace(",", "  "), "   "),
    "columns turned round": lambda n: "conductance_G0,displacement_nm\n" + "".join(
        f"{g:.6g},{z:.4g}\n" for z, g in _rows(n)
    ),
    "a third column": lambda n: "displacement_nm,conductance_G0,bias_V\n" + "".join(
        f"{z:.4g},{g:.6g},0.1\n" for z, g in _rows(n)
    ),
    "blank line": lambda n: _line_with(_plain(n), 20, "\n"),
    "heading again": lambda n: _line_with(_plain(n), 20, HEADING),
    "empty cells": lambda n: _line_with(_plain(n), 20, "0.19,\n"),
    "row of NaN": lambda n: _line_with(_plain(n), 20, "nan,nan\n"),
    "words for nothing": lambda n: _line_with(_plain(n), 20, "0.19,N/A\n"),
    "returns": lambda n: _plain(n).replace("\n", "\r\n"),
    "lone return": lambda n: _line_with(_plain(n), 20, "0.19,0.5\r0.195,0.4\n"),
    "remark between": lambda n: _line_with("# made by hand\n" + _plain(n), 20, "# a pause\n"),
    "last line without end": lambda n: _plain(n).rstrip(),
    "blank lines at the end": lambda n: _plain(n) + "\n\n",
    "delimiter at the end": lambda n: _plain(n).replace("\n", ",\n"),
    "one row": lambda n: HEADING + "0,1\n",
    "exponent D": lambda n: _line_with(_plain(n), 1, "0,1.5D-3\n"),
    "mark before": lambda n: "\ufeff" + _plain(n),
    "there and back": lambda n: "displacement_nm,conductance_G0\n" + "".join(
        f"{z:.4g},{g:.6g}\n" for z, g in [*_rows(n), *reversed(_rows(n))]
    ),
}  # fmt: skip
BAD = {
    "a word": lambda n: _line_with(_plain(n), 20, "0.19,many\n"),
    "a cell too many": lambda n: _line_with(_plain(n), 20, "0.19,1,1\n"),
    "no numbers": lambda n: HEADING,
    "empty": lambda n: "",
    "zeros": lambda n: _plain(n)[:200] + "\0" + _plain(n)[200:],
}


def _without_name(texts: list[str], names: set[str]) -> list[str]:
    """Return notes without the names of files, and once for each file that they are said of."""
    found = []
    for text in texts:
        many = re.fullmatch(r"(.*) \((\d+) files, first [^)]*\)", text)
        plain = many[1] if many else next((text[len(one) + 2 :] for one in names if text.startswith(f"{one}: ")), text)
        found += [plain] * (int(many[2]) if many else 1)
    return sorted(found)


def _forget() -> None:
    """Make readers forget the files that they have seen."""
    for reader in registry.readers():
        reader.__init__()


def _assert_alike(folder: Path, recipe: Recipe | None = None) -> None:
    """Assert that the files of a folder give together what each gives to readers that have seen no other."""
    paths = [file.path for file in intake.find_files(folder)[0]]
    singles, faults = [], []
    for path in paths:
        _forget()
        try:
            singles.append(intake.read(path, recipe))
        except InputError as error:
            faults.append((error.what, error.where, error.remedy))
    _forget()
    together = intake.read(folder, recipe)
    for name, channel in together.channels.items():
        expected = [
            one.channels[name].samples.read(0, one.samples) if name in one.channels else np.full(one.samples, np.nan)
            for one in singles
        ]
        np.testing.assert_array_equal(channel.samples.read(0, together.samples), np.concatenate(expected), name)
    assert set(together.channels) == {name for one in singles for name in one.channels}
    np.testing.assert_array_equal(np.diff(together.offsets), np.concatenate([np.diff(one.offsets) for one in singles]))
    np.testing.assert_array_equal(together.drive.start, np.concatenate([one.drive.start for one in singles]))
    for row in range(together.traces):
        number, at = 0, row
        while at >= singles[number].traces:
            at -= singles[number].traces
            number += 1
        expected = singles[number].trace_drive(at)
        if together.drive.relative is not None:  # one file with unequal steps: all drives are kept as they are
            expected = expected[0] + (expected - expected[0]).astype(np.float32)
        np.testing.assert_array_equal(together.trace_drive(row), expected, singles[number].sources[0].name)
    assert list(together.sources) == [one.sources[0] for one in singles]
    columns = {name for one in singles for name in one.table} - {"source", "partner"}
    for name in columns:
        kinds = {one.table[name].dtype.kind for one in singles if name in one.table}
        nothing = "" if kinds & set("US") else np.nan
        expected = np.concatenate([one.table.get(name, np.full(one.traces, nothing)) for one in singles])
        np.testing.assert_array_equal(together.table[name], expected, name)
    for name in ("start", "stop", "kind"):
        np.testing.assert_array_equal(
            getattr(together.phases, name), np.concatenate([getattr(one.phases, name) for one in singles])
        )
    names = {path.name for path in paths}
    said = _without_name(together.notes["assumptions"], names)
    assert said == sorted(text for one in singles for text in _without_name(one.notes["assumptions"], names))
    assert [(one["what"], one["where"], one["remedy"]) for one in together.notes["bad_files"]] == faults


def _fill(folder: Path, odd: dict[int, str | bytes]) -> None:
    for number in range(FILES):
        text = odd.get(number, _plain(number))
        (folder / f"trace_{number:03d}.csv").write_bytes(text if isinstance(text, bytes) else text.encode())


@pytest.mark.parametrize("name", [*ODD, *BAD])
def test_one_odd_file_among_many_is_read_as_if_it_were_alone(tmp_path, name):
    _fill(tmp_path, {33: (ODD | BAD)[name](33)})
    _assert_alike(tmp_path)


def test_many_odd_files_are_each_read_as_if_they_were_alone(tmp_path):
    kinds = list((ODD | BAD).values())
    for place, kind in enumerate(kinds):
        (tmp_path / f"trace_{100 + 2 * place}.csv").write_text(kind(place), newline="")
    _fill(tmp_path, {})
    (tmp_path / "trace_900.csv.gz").write_bytes(gzip.compress(_plain(900).encode()))
    np.save(tmp_path / "trace_901.npy", np.exp(np.linspace(0, -9, 50)))
    (tmp_path / "trace_030.json").write_text('{"specimen": "C2", "sampling_hertz": 10000}')
    _assert_alike(tmp_path)


def test_the_first_file_may_be_the_odd_one(tmp_path):
    _fill(tmp_path, {0: BAD["a word"](0), 1: ODD["decimal comma"](1), 2: ODD["blank line"](2)})
    _assert_alike(tmp_path)


def test_constants_in_the_name_of_a_file_are_those_of_its_own(tmp_path):
    for number in range(40):
        text = "time (ms),current (nA)\n" + "".join(f"{z * (1 + number % 3):.4g},{g:.6g}\n" for z, g in _rows(number))
        (tmp_path / f"chip{number % 4}_{50 + 10 * (number % 12)}mV_{number}.csv").write_text(text)
    recipe = Recipe.build({"intake": {"name_template": "{specimen}_{bias_mV}mV_{n}.csv"}})
    _assert_alike(tmp_path, recipe)
    together = intake.read(tmp_path, recipe)
    bias = np.array([50 + 10 * (int(n) % 12) for n in together.table["n"]]) / 1000
    np.testing.assert_allclose(together.table["bias_volt"], bias)
    assert len(np.unique(together.table["sample_interval_second"])) == 3


def test_what_stands_before_the_numbers_may_differ_from_file_to_file(tmp_path):
    for number in range(40):
        before = f"# gain: {10 ** (6 + number % 3):g} V/A\n# bias: {100 + number // 20} mV\n"
        text = before + _plain(number, "piezo (V),amplifier (V)\n")
        (tmp_path / f"trace_{number}.csv").write_text(text)
    _assert_alike(tmp_path, Recipe.build({"calibration": {"nm_per_volt": 2.0}}))


@given(st.lists(st.lists(st.sampled_from(["1", " ", "\t", "\n", "\r", ","]), max_size=8).map("".join), max_size=4))
def test_runs_of_blanks_become_one(parts):
    text = "".join(parts).encode()
    by_patterns = re.sub(rb"(?m)^ +| +(?=\r?$)", b"", re.sub(rb"[ \t]+", b" ", text))
    target = np.empty(len(text), np.uint8)
    length = single_blanks(np.frombuffer(text, np.uint8), target)
    assert target[:length].tobytes() == by_patterns


@given(
    st.lists(
        st.lists(st.sampled_from(["1,2", "3,4", "", "nan,nan", "5,", "6", "7,8\r", "9\r9,9", "x,1"]), max_size=5),
        min_size=1,
        max_size=4,
    )
)
def test_texts_parsed_in_one_go_give_what_each_gives(texts):
    form = find_form(HEADING + "1,2\n" * 20)
    bodies = ["".join(f"{line}\n" for line in lines).encode() for lines in texts]
    found = numbers_of_each(bodies, form)
    if found is None:
        return
    for body, rows in zip(bodies, found, strict=True):
        alone = numbers(body, form, Path("a.csv"), 1)
        assert alone.lengths == rows.lengths
        assert not any(rows.said)
        for one, other in zip(alone.columns, rows.columns, strict=True):
            np.testing.assert_array_equal(one, other)
