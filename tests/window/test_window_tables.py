"""Tables keep their own order of rows; sorting and filtering equal numpy's."""

from __future__ import annotations

import numpy as np
import pytest
from PySide6.QtCore import Qt

from meseta.errors import CallError
from meseta.window.tables.filters import mask_for
from meseta.window.tables.model import Column, ColumnModel, plain

UP, DOWN = Qt.SortOrder.AscendingOrder, Qt.SortOrder.DescendingOrder


@pytest.fixture
def data():
    random = np.random.default_rng(3)
    return {
        "trace": np.repeat(np.arange(200), 5),
        "level_g0": np.where(random.random(1000) < 0.05, np.nan, random.random(1000)),
        "kind": random.choice(["metal", "molecule"], 1000),
        "kept": random.random(1000) < 0.5,
    }


@pytest.fixture
def model(qapp, data):
    one = ColumnModel(tuple(Column(name, name, plain) for name in data))
    one.set_columns(data)
    return one


def test_sorting_is_stable_both_ways_and_puts_missing_numbers_last(model, data):
    model.sort(1, UP)
    level = data["level_g0"][model.order]
    known = level[~np.isnan(level)]
    assert np.array_equal(known, np.sort(known)) and np.isnan(level[len(known) :]).all()
    model.sort(1, DOWN)
    level = data["level_g0"][model.order]
    assert np.array_equal(level[: len(known)], np.sort(known)[::-1]) and np.isnan(level[len(known) :]).all()
    model.sort(2, DOWN)
    kinds = data["kind"][model.order]
    assert (kinds[:-1] >= kinds[1:]).all()
    molecules = model.order[kinds == "molecule"]
    assert (np.diff(molecules) > 0).all()  # equal values keep the order of the data


def test_a_filter_and_an_order_go_together(model, data):
    model.set_mask(mask_for("level_g0 > 0.5 and kind = molecule", data))
    model.sort(1, UP)
    expected = np.flatnonzero((data["level_g0"] > 0.5) & (data["kind"] == "molecule"))
    assert set(model.order) == set(expected)
    shown = model.shown_columns()
    assert (np.diff(shown["level_g0"]) >= 0).all()
    assert model.shown_row(int(expected[0])) >= 0 and model.shown_row(-5) == -1


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("trace in 10..12", lambda d: (d["trace"] >= 10) & (d["trace"] < 12)),
        ("trace = 7", lambda d: d["trace"] == 7),
        ("kept = yes", lambda d: d["kept"]),
        ("kept != yes", lambda d: ~d["kept"]),
        ("MOLEC", lambda d: d["kind"] == "molecule"),
        ("kind != metal and trace <= 3", lambda d: (d["kind"] != "metal") & (d["trace"] <= 3)),
    ],
)
def test_filter_lines(data, text, expected):
    assert np.array_equal(mask_for(text, data), expected(data))


@pytest.mark.parametrize("text", ["nothing > 3", "trace > many", "kind > metal"])
def test_a_filter_that_cannot_be_understood_says_why(data, text):
    with pytest.raises(CallError):
        mask_for(text, data)


def test_an_empty_filter_shows_all(data):
    assert mask_for("  ", data) is None


def test_a_million_rows_are_sorted_and_read_by_place(qapp):
    random = np.random.default_rng(5)
    values = random.random(1_000_000)
    model = ColumnModel((Column("x", "x", plain),))
    model.set_columns({"x": values})
    model.sort(0, UP)
    assert model.rowCount() == 1_000_000
    assert model.row_of(0) == int(values.argmin()) and model.row_of(999_999) == int(values.argmax())
    assert model.index(0, 0).data() == plain(values.min())
