"""Whatever another library wrote, in whatever layout: what a file is kept as, it fits, and it is read the same."""

from __future__ import annotations

import numpy as np
import pytest
from test_intake_layouts import WRITERS, siemens_and_angstrom
from test_intake_more_layouts import CASES

from meseta import intake
from meseta.recipe import Recipe
from meseta.recipe.layout_files import with_layout


def assert_kept(path, recipe):
    plain = intake.read(path, recipe)
    described, _ = intake.describe(path, recipe)
    held = with_layout(recipe, "kept", described[0].form, list(recipe.intake.channels))
    held = Recipe.parse(held.text())
    if held.intake.reader == "binary":
        binary = ("reader", "binary_type", "binary_order", "binary_header_byte", "binary_channels")
        plain_intake = Recipe().model_dump()["intake"]
        held = held.with_values("intake", **{name: plain_intake[name] for name in binary})  # the layout holds these
    again = intake.read(path, held)
    assert again.notes["bad_files"] == plain.notes["bad_files"]
    assert again.traces == plain.traces
    np.testing.assert_array_equal(again.conductance[:], plain.conductance[:])
    np.testing.assert_array_equal(again.drive_values(0, again.traces), plain.drive_values(0, plain.traces))
    assert again.drive.unit == plain.drive.unit
    assert {one.kept_layout for one in intake.describe(path, held)[0]} == {"kept"}


@pytest.mark.parametrize("write", WRITERS, ids=lambda write: write.__name__)
def test_a_file_fits_what_it_was_kept_as(write, tmp_path):
    recipe = Recipe()
    if write is siemens_and_angstrom:
        recipe = Recipe.build({"intake": {"channels": {"Abstand [Å]": {"role": "displacement", "unit": "Å"}}}})
    assert_kept(write(tmp_path), recipe)


@pytest.mark.parametrize("write", CASES, ids=lambda write: write.__name__)
def test_a_file_of_a_further_layout_fits_what_it_was_kept_as(write, tmp_path):
    path, recipe, *_ = write(tmp_path)
    assert_kept(path, Recipe.build(recipe))
