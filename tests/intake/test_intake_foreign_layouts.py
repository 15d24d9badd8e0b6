"""Recordings as other people's programs write them: the same traces in layouts that no other test of intake holds."""

from pathlib import Path

import numpy as np
import pytest

import meseta

G0 = 7.748091729863649e-05  # S; 2e²/h of the exact SI values of e and h
HEADINGS = (
    "Déplacement (nm)\tConductance (G0)",
    "距离 (nm)\t电导 (G0)",
    "Dehnung (nm)\tLeitwert (G0)",
    "Δz (nm)\tG / G_0",
)


def _columns() -> tuple[np.ndarray, np.ndarray]:
    displacement = np.arange(300) * 0.004
    conductance = np.where(displacement < 0.5, 0.98, 1e-2 * 10 ** (-9 * (displacement - 0.5))) + 1e-6
    return displacement, conductance


def _body(first: np.ndarray, second: np.ndarray, separator: str = "\t", end: str = "") -> str:
    return "".join(f"{a:.9g}{separator}{b:.9g}{end}\n" for a, b in zip(first, second, strict=True))


def _same(path: Path) -> None:
    displacement, conductance = _columns()
    traces = meseta.read(path)
    assert traces.traces == 1
    np.testing.assert_allclose(traces.trace_conductance(0), conductance, rtol=4e-7)
    drive = traces.trace_drive(0)
    np.testing.assert_allclose(drive - drive[0], displacement, atol=1e-6)


@pytest.mark.parametrize("heading", HEADINGS)
def test_headings_of_other_languages_are_understood(tmp_path: Path, heading: str) -> None:
    path = tmp_path / "trace.txt"
    path.write_text(heading + "\n" + _body(*_columns()), encoding="utf-8")
    _same(path)


@pytest.mark.parametrize("mark", ["%", ";", "//", "!", "--"])
def test_bias_in_remarks_of_any_mark_reaches_the_current(tmp_path: Path, mark: str) -> None:
    displacement, conductance = _columns()
    path = tmp_path / "trace.dat"
    head = f"{mark} bias = 100 mV\n{mark} displacement (nm), current (A)\n"
    path.write_text(head + _body(displacement, conductance * G0 * 0.1, ","), encoding="utf-8")
    _same(path)


@pytest.mark.parametrize("end", ["\r", "\r\n"])
@pytest.mark.parametrize("encoding", ["utf-8-sig", "utf-16", "utf-16-le"])
def test_line_ends_and_encodings(tmp_path: Path, end: str, encoding: str) -> None:
    path = tmp_path / "trace.csv"
    text = "displacement (nm),conductance (G0),\n" + _body(*_columns(), ",", ",")
    path.write_bytes(text.replace("\n", end).encode(encoding))
    _same(path)


def test_a_unit_in_a_line_of_its_own_belongs_to_the_gain(tmp_path: Path) -> None:
    displacement, conductance = _columns()
    path = tmp_path / "trace.txt"
    head = "gain=10\ngain_unit=V/mA\nbias=100\nbias_unit=mV\nnm_per_volt=2.5\n\nPiezo (V)\tAmplifier (V)\n"
    path.write_text(head + _body(displacement / 2.5, conductance * G0 * 0.1 * 1e4), encoding="utf-8")
    _same(path)
