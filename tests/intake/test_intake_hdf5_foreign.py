"""HDF5 files as data-frame and table libraries write them, put together with h5py after their documented layouts.

Sources: documentation of pandas ("IO tools: HDF5 (PyTables)") and the user's guide of PyTables ("file format"); both
were compared once with files that these libraries wrote themselves.
"""

from __future__ import annotations

import h5py
import hdf5plugin
import numpy as np
import pytest

from meseta import intake
from meseta.errors import InputError
from meseta.intake.readers import hdf5_chunks

LENGTHS = np.array([300, 200, 250])
G = np.concatenate([np.geomspace(8.0, 1e-5, n) for n in LENGTHS])
Z = np.concatenate([np.arange(n) * 0.004 for n in LENGTHS])
TRACE = np.repeat(np.arange(3), LENGTHS)
BLOCKS = {"trace": TRACE[:, None], "distance_nm conductance_G0": np.column_stack([Z, G])}


def check(path):
    traces = intake.read(path)
    assert np.diff(traces.offsets).tolist() == LENGTHS.tolist()
    np.testing.assert_array_equal(traces.conductance, G.astype(np.float32))
    for row, n in enumerate(LENGTHS):
        np.testing.assert_allclose(traces.trace_drive(row) - traces.trace_drive(row)[0], Z[:n], atol=1e-6)
    return traces


def pickled_words(words):
    """Return a list of words as the text of protocol 0 of Python's pickles."""
    return np.bytes_("(lp0\n" + "".join(f"V{word}\np{n}\na" for n, word in enumerate(words, 1)) + ".")


def test_blocks_of_a_fixed_frame_are_columns_under_their_names(tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as file:
        frame = file.create_group("junctions")
        frame.attrs.update(pandas_type=np.bytes_("frame"), CLASS=np.bytes_("GROUP"), ndim=2, nblocks=2)
        frame["axis0"] = np.array(" ".join(BLOCKS).split(), "S")
        frame["axis1"] = np.arange(len(G))
        frame["axis1"].attrs["name"] = np.bytes_("N.")
        for place, (names, values) in enumerate(BLOCKS.items()):
            frame[f"block{place}_items"] = np.array(names.split(), "S")
            frame[f"block{place}_values"] = values
            frame[f"block{place}_values"].attrs.update(CLASS=np.bytes_("ARRAY"), transposed=1)
    traces = check(tmp_path / "a.h5")
    with intake.open_recording(tmp_path / "a.h5") as recording:
        assert {channel.name for channel in recording.channels} == {"trace", "distance_nm", "conductance_G0"}
        assert not recording.metadata
        assert not recording.table
    assert "axis0" not in traces.table


def test_blocks_of_a_table_of_a_frame_are_columns_and_its_index_tree_is_no_data(tmp_path):
    kind = np.dtype([("index", "i8"), ("values_block_0", "i8", (1,)), ("values_block_1", "f8", (2,))])
    table = np.zeros(len(G), kind)
    table["index"] = np.arange(len(G))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        frame = file.create_group("junctions")
        frame.attrs.update(pandas_type=np.bytes_("frame_table"), CLASS=np.bytes_("GROUP"))
        for place, values in enumerate(BLOCKS.values()):
            table[f"values_block_{place}"] = values
        frame["table"] = table
        for place, names in enumerate(BLOCKS):
            frame["table"].attrs[f"values_block_{place}_kind"] = pickled_words(names.split())
        tree = frame.create_group("_i_table")
        tree.attrs["CLASS"] = np.bytes_("TINDEX")
        tree.create_group("index")["sortedLR"] = np.arange(131201)
    check(tmp_path / "a.h5")
    with h5py.File(tmp_path / "a.h5", "a") as file:  # anything else than a plain list of words gives no names
        file["junctions/table"].attrs["values_block_1_kind"] = np.bytes_("cposix\nsystem\np0\n.")
    with pytest.raises(InputError, match="values_block_1 a"):
        intake.read(tmp_path / "a.h5")


def test_lengths_in_another_group_cut_the_record(tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["data/conductance_G0"], file["data/distance_nm"] = G, Z
        file["index/trace_length"] = LENGTHS
    check(tmp_path / "a.h5")


@pytest.mark.parametrize("attribute", ["name", "label", "long_name", "description"])
def test_an_attribute_in_words_says_what_a_channel_is(attribute, tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.attrs.update(bias_volt=0.1, gain_volt_per_ampere=1e5, nm_per_volt=2.5)
        for name, words in {"ai0": "current amplifier", "ai1": "piezo", "ai2": "room and piezo, ground"}.items():
            file[name] = np.linspace(0.0, 1.0, 100)
            file[name].attrs.update({attribute: words, "unit": "V"})
    with intake.open_recording(tmp_path / "a.h5") as recording:
        found = {channel.name: channel for channel in recording.channels}
    assert (found["ai0"].role, found["ai1"].role) == ("amplifier", "piezo")
    assert bool(found["ai0"].doubts) == (attribute in ("long_name", "description"))


def test_what_an_attribute_calls_a_drive_is_not_proposed_as_amplifier(tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as file:
        for name, words in {"ai0": "", "ai1": "piezo or amplifier output"}.items():
            file[name] = np.linspace(0.0, 1.0, 100)
            file[name].attrs.update(comment=words, unit="V")
    with pytest.raises(InputError, match=r'intake.channels."ai0"'):
        intake.read(tmp_path / "a.h5")


def _large_chunk(path, rows):
    kind = np.dtype([("conductance_G0", "f8"), ("distance_nm", "f8"), ("trace", "i4")])
    table = np.zeros(len(G), kind)
    table["conductance_G0"], table["distance_nm"], table["trace"] = G, Z, TRACE
    with h5py.File(path, "w") as file:
        file.create_dataset("junction", data=table, chunks=(rows,), maxshape=(None,), **hdf5plugin.Blosc2())
    return path


def test_a_chunk_larger_than_the_cache_is_unpacked_once(tmp_path, monkeypatch):
    path = _large_chunk(tmp_path / "a.h5", 2_000_000)
    unpacked = []
    block = hdf5_chunks.UnpackedRows._block

    def counted(self, name, dataset, number, rows):
        if (name, number) not in self._kept:
            unpacked.append((name, number))
        return block(self, name, dataset, number, rows)

    monkeypatch.setattr(hdf5_chunks.UnpackedRows, "_block", counted)
    check(path)
    assert len(unpacked) == 1


def test_chunks_that_no_memory_should_hold_are_refused(tmp_path, monkeypatch):
    path = _large_chunk(tmp_path / "a.h5", 2_000_000)
    monkeypatch.setattr("meseta.intake.readers.hdf5_tree.LARGEST_CHUNK_BYTE", 32 << 20)
    with pytest.raises(InputError, match="chunks of 38 MB"):
        intake.read(path)


def test_what_is_kept_of_large_chunks_is_bounded(monkeypatch):
    monkeypatch.setattr(hdf5_chunks, "KEPT_BYTE", 4000)
    kept, data = hdf5_chunks.UnpackedRows(), np.arange(10_000.0)
    for start, stop in [(0, 10), (90, 110), (100, 1000), (9990, 10_000), (5, 5), (0, 10_000)]:
        np.testing.assert_array_equal(kept.read("a", data, 100, start, stop), data[start:stop])
        assert sum(one.nbytes for one in kept._kept.values()) <= 4000
