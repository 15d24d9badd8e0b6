"""Igor binary waves written byte by byte, and headerless binary: what was put in comes out, and no mutant crashes.

The wave layout (version 5: 64 bytes of header, 320 bytes of wave header, samples, note) is the published one of the
format's technical note TN003 "Igor Binary Format".
"""

from __future__ import annotations

import struct

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from meseta import intake
from meseta.errors import MesetaError
from meseta.recipe import Recipe

NUMBER_TYPE = {"f4": 2, "f8": 4, "i1": 8, "i2": 16, "i4": 32, "u1": 72, "u2": 80, "u4": 96}
NM = np.linspace(0, 1, 64)


def wave(
    values: np.ndarray,
    *,
    unit: str = "",
    step: float = 1.0,
    axis: str = "",
    note: str = "",
    order: str = "<",
    name: str = "G",
) -> bytes:
    """Return a version 5 wave; its header's 16-bit words sum to zero."""
    body, text = values.astype(values.dtype.newbyteorder(order)).tobytes("F"), note.encode()
    sizes = (*values.shape, 0, 0, 0)[:4]
    head = struct.pack(order + "hhiiii4i4iiii", 5, 0, 320 + len(body), 0, len(text), 0, *[0] * 8, 0, 0, 0)
    kind = NUMBER_TYPE[values.dtype.str[1:]]
    fields = struct.pack(order + "IIIihh6sh32siI", 0, 0, 0, values.size, kind, 0, b"", 1, name.encode(), 0, 0)
    fields += struct.pack(order + "4i4d4d", *sizes, step, 1, 1, 1, 0, 0, 0, 0)
    fields += struct.pack(order + "4s16shhdd", unit.encode(), axis.encode(), 0, 0, 0, 0)
    fields += struct.pack(order + "I4I4II16i", 0, *[0] * 8, 0, *[0] * 16)
    fields += struct.pack(order + "hhhBBIihhII", 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0)
    header = bytearray(head + fields)
    assert len(header) == 384
    put_right(header, 2, order)
    return bytes(header) + body + text


def old_wave(
    version: int,
    values: np.ndarray,
    order: str = "<",
    *,
    unit: str = "",
    step: float = 1.0,
    axis: str = "",
    note: str = "",
    name: str = "G",
) -> bytes:
    """Return a wave of version 2 or 3: 16 or 20 bytes of header, 110 of wave header, samples, 16 bytes, note."""
    body, text = values.astype(values.dtype.newbyteorder(order)).tobytes(), note.encode()
    sizes = (0, 0) if version == 3 else (0,)  # of formula and picture
    head = struct.pack(f"{order}hii{len(sizes)}ih", version, 110 + len(body) + 16, len(text), *sizes, 0)
    kind = NUMBER_TYPE[values.dtype.str[1:]]
    fields = struct.pack(order + "hI20shhI4s4sih", kind, 0, name.encode(), 0, 0, 0, unit.encode(), axis.encode(),
                         len(values), 0)  # fmt: skip
    fields += struct.pack(order + "ddhhhdd2cIiI2cII", step, 0, 0, 0, 0, 0, 0, b"\0", b"\0", 0, 0, 0, b"\0", b"\0", 0, 0)
    header = bytearray(head + fields)
    assert len(header) == {2: 126, 3: 130}[version]
    put_right(header, len(head) - 2, order)
    return bytes(header) + body + bytes(16) + text


def put_right(header: bytearray, place: int, order: str) -> None:
    """Set the checksum at a place so that the header's 16-bit words sum to zero."""
    header[place : place + 2] = b"\0\0"
    total = int(np.frombuffer(bytes(header), order + "i2").astype(np.int64).sum())
    struct.pack_into(order + "h", header, place, ((-total + 0x8000) & 0xFFFF) - 0x8000)


@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_a_wave_comes_back_with_unit_interval_and_note(tmp_path, kind):
    ampere = (np.geomspace(1e-6, 1e-10, 200)).astype(kind)
    path = tmp_path / "trace.ibw"
    path.write_bytes(wave(ampere, unit="A", step=5e-5, axis="s", note="bias_V = 0.1\rspecimen = A3\r"))
    with intake.open_recording(path) as recording:
        assert recording.source.reader == "Igor"
        np.testing.assert_array_equal(recording.values(recording.channels[0], 0, 200), ampere.astype(np.float64))
    traces = intake.read(path)
    g0_siemens = 7.748091729863649e-05  # CODATA 2022
    np.testing.assert_allclose(traces.conductance, ampere / (0.1 * g0_siemens), rtol=2e-7)
    np.testing.assert_allclose(traces.table["sample_interval_second"], 5e-5)
    assert traces.table["specimen"].tolist() == ["A3"]


@pytest.mark.parametrize("place", [4, 12, 76, 132])
def test_a_wave_that_claims_more_than_its_file_holds_is_refused(tmp_path, place):
    """Sizes of samples, note, points and dimension are checked before anything is allocated for them."""
    content = bytearray(wave(np.linspace(2, 1, 64).astype(np.float32), unit="S"))
    struct.pack_into("<i", content, place, 1 << 30)
    path = tmp_path / "claims.ibw"
    path.write_bytes(bytes(content))
    with pytest.raises(MesetaError) as raised:
        intake.read(path, Recipe.build({"intake": {"reader": "Igor"}}))
    assert "claims more than the file holds" in raised.value.what


@pytest.mark.parametrize(("kind", "order"), [("float32", "little"), ("float64", "big"), ("int16", "big")])
def test_headerless_numbers_come_back(tmp_path, kind, order):
    rows = np.stack([np.linspace(3, 1, 64), np.linspace(0, 60, 64)], axis=1).round()
    dtype = np.dtype(kind).newbyteorder("<" if order == "little" else ">")
    path = tmp_path / "numbers.bin"
    path.write_bytes(b"header7" + rows.astype(dtype).tobytes())
    traces = intake.read(path, binary(kind, order))
    np.testing.assert_array_equal(traces.conductance, rows[:, 0])
    np.testing.assert_allclose(traces.trace_drive(0), rows[:, 1], rtol=1e-6)


def binary(kind: str = "float32", order: str = "little") -> Recipe:
    channels = {"g": {"role": "conductance", "unit": "G0"}, "z": {"role": "displacement", "unit": "nm"}}
    given_form = {"binary_type": kind, "binary_order": order, "binary_header_byte": 7, "binary_channels": ["g", "z"]}
    return Recipe.build({"intake": {"reader": "binary", "channels": channels, **given_form}})


ORIGINALS = {
    "a.ibw": wave(np.linspace(2, 1, 64).astype(np.float32), unit="S", note="bias_mV = 100"),
    "a.bin": b"header7" + np.stack([np.linspace(2, 1, 64), NM], axis=1).astype("<f4").tobytes(),
}


@pytest.mark.parametrize("name", sorted(ORIGINALS))
@settings(
    deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture], derandomize=True
)
@given(data=st.data())
def test_mutants_of_waves_and_bare_numbers_are_read_or_refused(tmp_path, name, data):
    """Any change of bytes gives traces or one of our errors; a wave's checksum is put right, so that it is read."""
    content = bytearray(ORIGINALS[name])
    for _ in range(data.draw(st.integers(1, 6))):
        place = data.draw(st.integers(4, len(content) - 1))
        content[place] = data.draw(st.sampled_from([0, 1, 10, 32, 44, 127, 128, 255]))
    if name == "a.ibw":
        content[2:4] = b"\0\0"
        total = int(np.frombuffer(bytes(content[:384]), "<i2").astype(np.int64).sum())
        struct.pack_into("<h", content, 2, ((-total + 0x8000) & 0xFFFF) - 0x8000)
    cut = data.draw(st.one_of(st.none(), st.integers(1, len(content))))
    path = tmp_path / name
    path.write_bytes(bytes(content[:cut]))
    try:
        assert intake.read(path, binary() if name == "a.bin" else None).traces > 0
    except MesetaError as error:
        assert str(error)
