"""Whatever another library wrote, in whatever layout: what a file is kept as, it fits, and it is read the same."""

from __future__ import annotations

from contextlib import ExitStack

import numpy as np
import pytest
from test_intake_layouts import WRITERS, siemens_and_angstrom
from test_intake_more_layouts import CASES

from meseta import intake
from meseta.intake.assembly import prepared
from meseta.intake.meaning.kept_layouts import kept_layout, nearest_fit
from meseta.intake.meaning.units import unit_factor
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


def test_a_layout_that_fits_the_file_of_another_reads_it_as_it_is_recognised(tmp_path):
    """Among all pairs of these files: where names and units agree, no role, unit or scale comes out otherwise."""
    fitting = 0
    with ExitStack() as stack:
        seen = [one for write in (*WRITERS, *CASES) if (one := opened(write, tmp_path, stack)) is not None]
        for name, first in seen:
            layout = kept_layout(first, Recipe().intake)
            for other, recording in seen:
                fit = nearest_fit(recording, {name: layout})[0]
                if other != name and not fit.differences:
                    fitting += 1
                    assert_same_meaning(fit.channels, prepared(recording, Recipe()).channels, f"{name}, {other}")
    assert fitting > 100  # the same two columns stand in many of them


def opened(write, folder, stack):
    """Return the name of a layout and its first recording; None where it takes a recipe to be understood."""
    place = folder / write.__name__
    place.mkdir()
    made = write(place)
    path, recipe = (made[0], Recipe.build(made[1])) if isinstance(made, tuple) else (made, Recipe())
    if recipe.intake != Recipe().intake:
        return None
    return write.__name__, stack.enter_context(intake.open_recording(intake.find_files(path)[0][0].path))


def assert_same_meaning(ours, plain, which):
    for one, other in zip(ours, plain, strict=True):
        assert (one.role, one.scale, one.offset) == (other.role, other.scale, other.offset), which
        assert one.unit == other.unit or unit_factor(one.unit, other.unit) == 1.0, which
