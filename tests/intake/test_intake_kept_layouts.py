"""Kept layouts: what fits is read as the user said, what does not is refused with the difference in words."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meseta import intake, study
from meseta.errors import InputError, RecipeError
from meseta.intake.meaning.kept_layouts import LayoutError, arrangement_of
from meseta.recipe import Recipe
from meseta.recipe.kept_layouts import KeptChannel, KeptLayout
from meseta.recipe.layout_files import keep_in_file, with_layout
from meseta.recipe.roles import ROLES
from meseta.work import Work

SAMPLES = 200
FALL = np.concatenate([np.full(80, 2.0), np.full(60, 1.0), np.full(60, 1e-5)])
STRETCH = np.round(np.arange(SAMPLES) * 0.01, 6)


def table(path, heading, columns, delimiter=","):
    """Write a table of text."""
    rows = [delimiter.join(repr(float(cell)) for cell in row) for row in np.column_stack(columns)]
    path.write_text("\n".join([heading, *rows]) + "\n", encoding="utf-8")
    return path


def pair(path, heading="z (nm),G (G0)", factor=1.0):
    return table(path, heading, [STRETCH, FALL * factor])


def wide(path, traces, shared="z (nm)"):
    return table(path, ",".join([shared, *(f"G_{n} (G0)" for n in range(traces))]), [STRETCH, *[FALL] * traces])


def grouped(path, traces, first=0, unit="G0", extra=()):
    """Write one HDF5 group a trace."""
    with h5py.File(path, "w") as file:
        for number in range(first, first + traces):
            group = file.create_group(f"night/trace_{number}")
            for name, values, said in (("conductance", FALL, unit), ("z", STRETCH, "nm"), *extra):
                group.create_dataset(name, data=values).attrs["unit"] = said
    return path


def kept(path, recipe=None, name="rig"):
    """Return a recipe with the layout of a file kept under a name."""
    recipe = recipe or Recipe()
    described, _ = intake.describe(str(path), recipe)
    answered = list(recipe.intake.channels)
    return with_layout(recipe, name, described[0].form, answered)


def differences(path, recipe):
    with pytest.raises(LayoutError) as caught:
        intake.read(str(path), recipe)
    return list(caught.value.differences)


# -- what fits --------------------------------------------------------------------------------------------------------


def test_a_file_of_the_same_layout_is_read_by_it_and_the_check_says_so(tmp_path):
    recipe = kept(pair(tmp_path / "a.csv"))
    described, _ = intake.describe(str(pair(tmp_path / "b.csv")), recipe)
    assert described[0].kept_layout == "rig"
    assert {one.ground for one in described[0].channels} == {"layout rig"}
    assert all(one.confidence == 1.0 and not one.doubts for one in described[0].channels)
    assert "kept layout 'rig'" in "\n".join(described[0].lines())
    plain, by_layout = intake.read(str(tmp_path / "b.csv")), intake.read(str(tmp_path / "b.csv"), recipe)
    assert np.array_equal(plain.conductance, by_layout.conductance)
    assert plain.drive.unit == by_layout.drive.unit == "nm"


def test_the_order_of_columns_and_the_spelling_of_units_are_no_difference(tmp_path):
    recipe = kept(table(tmp_path / "a.csv", "I (µA),z (nm)", [FALL, STRETCH]), Recipe().with_settings([BIAS]))
    other = table(tmp_path / "b.csv", "z [nm];I [uA]", [STRETCH, FALL], ";")
    assert intake.read(str(other), recipe).traces == 1


BIAS = "calibration.bias_volt=0.1"


@pytest.mark.parametrize(("learnt", "met"), [(100, 120), (120, 3), (5, 1), (1, 1)])
def test_the_number_of_traces_is_no_part_of_the_layout_of_a_wide_table(tmp_path, learnt, met):
    recipe = kept(wide(tmp_path / "a.csv", learnt))
    assert intake.read(str(wide(tmp_path / "b.csv", met)), recipe).traces == met


@pytest.mark.parametrize(("learnt", "met"), [(3, 40), (40, 3), (4, 1)])
def test_the_number_of_groups_and_their_numbers_are_no_part_of_the_layout(tmp_path, learnt, met):
    recipe = kept(grouped(tmp_path / "a.h5", learnt))
    assert intake.read(str(grouped(tmp_path / "b.h5", met, first=500)), recipe).traces == met


def test_numbers_in_headings_that_change_from_file_to_file_are_no_difference(tmp_path):
    recipe = kept(pair(tmp_path / "a.csv", "Stretch 7 (nm),Conductance 7 (G0)"))
    assert intake.read(str(pair(tmp_path / "b.csv", "Stretch 19 (nm),Conductance 19 (G0)")), recipe).traces == 1


def test_numbered_inputs_are_told_apart_by_their_numbers(tmp_path):
    given = Recipe().with_settings(
        [
            "intake.layout=one_trace_a_file",
            'intake.channels.AI0={role="displacement",unit="nm"}',
            'intake.channels.AI1={role="conductance",unit="G0"}',
        ]
    )
    layout = kept(pair(tmp_path / "a.csv", "AI0,AI1"), given).intake.layouts["rig"]
    recipe = with_layout(Recipe(), "rig", layout)
    assert intake.read(str(pair(tmp_path / "b.csv", "AI0,AI1")), recipe).traces == 1
    assert differences(pair(tmp_path / "c.csv", "AI0,AI2"), recipe) == ["it has no 'AI1'", "it has 'AI2' besides"]


# -- what does not ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("heading", "said"),
    [
        ("z (nm),G (S)", "'G (S)' is in S, where G0 was stated"),
        ("z (Å),G (G0)", "'z (Å)' is in Å, where nm was stated"),
        ("z,G (G0)", "'z' states no unit, where nm was stated"),
        ("weg (nm),G (G0)", "it has no 'z (nm)'; it has 'weg (nm)' besides"),
    ],
)
def test_the_difference_is_said_in_words(tmp_path, heading, said):
    recipe = kept(pair(tmp_path / "a.csv"))
    other = pair(tmp_path / "b.csv", heading)
    assert "; ".join(differences(other, recipe)) == said
    with pytest.raises(InputError) as caught:
        intake.read(str(other), recipe)
    assert "does not fit layout 'rig'" in caught.value.what
    assert caught.value.where == "b.csv"
    assert "--keep-layout" in caught.value.remedy


def test_a_unit_row_that_changed_is_noticed(tmp_path):
    recipe = kept(pair(tmp_path / "a.csv", "z,I\nnm,nA"), Recipe().with_settings([BIAS]))
    assert differences(pair(tmp_path / "b.csv", "z,I\nnm,µA"), recipe) == ["'I' is in µA, where nA was stated"]


def test_another_reader_is_a_difference(tmp_path):
    recipe = kept(pair(tmp_path / "a.csv", "z (nm),conductance (G0)"))
    with h5py.File(tmp_path / "b.h5", "w") as file:
        file.create_dataset("z", data=STRETCH).attrs["unit"] = "nm"
        file.create_dataset("conductance", data=FALL).attrs["unit"] = "G0"
    assert differences(tmp_path / "b.h5", recipe) == ["it is read as HDF5, not as text"]


def test_another_arrangement_is_a_difference(tmp_path):
    recipe = kept(grouped(tmp_path / "a.h5", 4))
    with h5py.File(tmp_path / "b.h5", "w") as file:
        file.create_dataset("conductance", data=np.tile(FALL, (6, 1))).attrs["unit"] = "G0"
        file.create_dataset("z", data=STRETCH).attrs["unit"] = "nm"
    said = differences(tmp_path / "b.h5", recipe)
    assert said[0] == "traces stand as '2D dataset, traces in rows', not as 'one group a trace'"


def test_a_dataset_besides_is_a_difference_until_it_is_said_what_it_is(tmp_path):
    recipe = kept(grouped(tmp_path / "a.h5", 4))
    other = grouped(tmp_path / "b.h5", 4, extra=[("force", STRETCH, "nN")])
    assert differences(other, recipe) == ["it has 'force' besides"]
    told = recipe.with_settings(['intake.channels.force={role="other",unit="nN"}'])
    assert "force" in intake.read(str(other), told).channels


def test_counts_in_the_place_of_volts_are_a_difference(tmp_path):
    def stored(path, values):
        with h5py.File(path, "w") as file:
            file.create_dataset("amplifier", data=values).attrs["unit"] = "V"
        return path

    given = Recipe().with_settings([BIAS, "calibration.gain_volt_per_ampere=1e6"])
    recipe = kept(stored(tmp_path / "a.h5", FALL), given)
    assert differences(stored(tmp_path / "b.h5", (FALL * 1000).astype(np.int16)), recipe) == [
        "'amplifier' holds whole numbers, not real ones"
    ]


def scaled(path, scale):
    with h5py.File(path, "w") as file:
        counts = file.create_dataset("conductance", data=np.round(FALL * 1000).astype(np.int16))
        counts.attrs["unit"] = "G0"
        if scale is not None:
            counts.attrs["scale"] = scale
    return path


def test_a_conversion_that_the_file_states_itself_may_change_but_not_vanish(tmp_path):
    recipe = kept(scaled(tmp_path / "a.h5", 1e-3))
    traces = intake.read(str(scaled(tmp_path / "b.h5", 2e-3)), recipe)
    assert float(traces.conductance[0]) == pytest.approx(4.0)
    said = differences(scaled(tmp_path / "c.h5", None), recipe)
    assert said == ["'conductance' states no scale, where it stated stored x 0.001 + 0"]


def test_a_scale_that_the_user_gave_holds_only_while_the_file_states_what_it_did(tmp_path):
    given = Recipe().with_settings(['intake.channels.conductance={role="conductance",unit="G0",scale=5e-4}'])
    recipe = kept(scaled(tmp_path / "a.h5", 1e-3), given)
    assert float(intake.read(str(scaled(tmp_path / "b.h5", 1e-3)), recipe).conductance[0]) == pytest.approx(1.0)
    assert differences(scaled(tmp_path / "c.h5", 2e-3), recipe) == [
        "'conductance' states stored x 0.002 + 0, where it stated stored x 0.001 + 0"
    ]


# -- rows or columns, headerless numbers ------------------------------------------------------------------------------


def square(path, values):
    with h5py.File(path, "w") as file:
        file.create_dataset("conductance", data=values).attrs["unit"] = "G0"
    return path


def test_rows_are_taken_for_traces_without_doubt_where_the_layout_says_so(tmp_path):
    recipe = kept(square(tmp_path / "a.h5", np.tile(FALL, (50, 1))))
    unclear = square(tmp_path / "b.h5", np.random.default_rng(3).normal(1, 0.1, (60, 60)))
    doubts = [doubt for doubt in intake.describe(str(unclear))[0][0].doubts if "rows" in doubt]
    assert doubts
    described = intake.describe(str(unclear), recipe)[0][0]
    assert described.kept_layout == "rig" and described.traces == 60
    assert not [doubt for doubt in described.doubts if "rows" in doubt]


def test_an_array_that_clearly_stands_the_other_way_does_not_fit(tmp_path):
    recipe = kept(square(tmp_path / "a.h5", np.tile(FALL, (50, 1))))
    turned = square(tmp_path / "b.h5", np.tile(FALL, (50, 1)).T.copy())
    assert differences(turned, recipe) == [
        "traces stand as '2D dataset, traces in columns', not as '2D dataset, traces in rows'"
    ]


def test_headerless_numbers_are_read_as_the_layout_says_and_other_files_are_not_taken_for_them(tmp_path):
    def raw(path):
        np.column_stack([STRETCH, FALL]).astype("<f4").tofile(path)
        return path

    given = Recipe().with_settings(
        ["intake.reader=binary", "intake.binary_type=float32", 'intake.binary_channels=["z_nm","conductance_G0"]']
    )
    layout = kept(raw(tmp_path / "a.dat"), given).intake.layouts["rig"]
    assert (layout.reader, layout.binary_type, layout.binary_channels) == (
        "binary",
        "float32",
        ["z_nm", "conductance_G0"],
    )
    recipe = with_layout(Recipe(), "rig", layout)
    traces = intake.read(str(raw(tmp_path / "b.dat")), recipe)
    np.testing.assert_allclose(traces.conductance[:], FALL, rtol=1e-6)
    text = pair(tmp_path / "c.csv")
    assert differences(text, recipe)[0] == "it is read as text, not as binary"


# -- several layouts, batches -----------------------------------------------------------------------------------------


def test_in_a_batch_only_what_fits_no_layout_is_listed_as_bad(tmp_path):
    recipe = kept(pair(tmp_path / "a1.csv"))
    recipe = kept(
        grouped(tmp_path / "b1.h5", 3), Recipe(intake=recipe.intake.model_copy(update={"use_layout": "none"})), "groups"
    )
    pair(tmp_path / "a2.csv", "z (nm),G (S)", 7.748e-5)
    pair(tmp_path / "a3.csv")
    assert list(recipe.intake.layouts) == ["rig", "groups"]
    traces = intake.read(str(tmp_path), recipe)
    assert traces.traces == 1 + 1 + 3
    assert [one["where"] for one in traces.notes["bad_files"]] == ["a2.csv"]
    assert "'rig'" in traces.notes["bad_files"][0]["what"]
    with pytest.raises(LayoutError, match="groups"):
        intake.read(str(tmp_path / "a1.csv"), recipe.with_settings(["intake.use_layout=groups"]))
    assert intake.read(str(tmp_path / "a2.csv"), recipe.with_settings(["intake.use_layout=none"])).traces == 1


def test_two_layouts_that_fit_and_say_different_things_are_an_error_until_one_is_chosen(tmp_path):
    path = pair(tmp_path / "a.csv")
    one = kept(path)
    layout = one.intake.layouts["rig"]
    twisted = {"z (nm)": layout.channels["z (nm)"].model_copy(update={"role": "other"})}
    other = layout.model_copy(update={"channels": layout.channels | twisted})
    both = with_layout(one, "no drive", other)
    with pytest.raises(LayoutError, match=r"in different ways.*use_layout"):
        intake.read(str(path), both)
    chosen = intake.read(str(path), both.with_settings(['intake.use_layout="no drive"']))
    assert chosen.drive.unit != "nm"
    spelled = {"G (G0)": layout.channels["G (G0)"].model_copy(update={"unit": "2e2/h"})}
    same = with_layout(one, "again", layout.model_copy(update={"channels": layout.channels | spelled}))
    assert intake.read(str(path), same).traces == 1


def test_what_the_recipe_says_of_a_channel_wins_over_the_layout(tmp_path):
    recipe = kept(pair(tmp_path / "a.csv")).with_settings(['intake.channels."z (nm)"={role="displacement",unit="Å"}'])
    described = intake.describe(str(tmp_path / "a.csv"), recipe)[0][0]
    ground = {one.name: (one.ground, one.unit) for one in described.channels}
    assert ground == {"z (nm)": ("recipe", "Å"), "G (G0)": ("layout rig", "G0")}


# -- studies ----------------------------------------------------------------------------------------------------------


def test_a_study_keeps_its_layouts_and_new_files_must_fit_them(tmp_path):
    recipe = kept(pair(tmp_path / "a.csv"))
    path = tmp_path / "night.h5"
    study.gather([tmp_path / "a.csv"], path, recipe)
    pair(tmp_path / "b.csv", factor=1.1)
    pair(tmp_path / "c.csv", "z (nm),G (S)", 7.748e-5)
    answer, bad = study.gather([tmp_path / "b.csv", tmp_path / "c.csv"], path)
    assert answer["recordings_added"] == 1
    assert len(bad) == 1 and "'G (S)' is in S" in bad[0].what
    with study.Study.open(path) as opened:
        assert opened.recipe.intake.layouts == recipe.intake.layouts
        again = opened.analysis(opened.recipe.with_settings(["calibration.series_resistance_ohm=100"])).traces
        assert again.traces == 2  # made anew of what the study keeps, which fits as the files did


def test_following_takes_what_fits_and_tells_of_what_does_not(tmp_path, monkeypatch):
    monkeypatch.setattr("meseta.study.following.FOLLOW_SECONDS", 0.02)
    folder = tmp_path / "night"
    folder.mkdir()
    recipe = kept(pair(folder / "a.csv"))
    study.gather([folder], tmp_path / "night.h5", recipe)
    pair(folder / "b.csv", "z (nm),G (S)", 7.748e-5)
    pair(folder / "c.csv", factor=1.1)
    work, told = Work(), []

    def enough(*said):
        told.append(said)
        if len(told) == 2:
            work.cancel.set()

    answer, bad = study.gather([folder], tmp_path / "night.h5", work=work, follow=True, say=enough, grown=enough)
    assert (answer["recordings_added"], answer["recordings"]) == (1, 2)
    assert [one.where for one in bad] == ["b.csv"] and "does not fit layout 'rig'" in bad[0].what


def test_a_layout_changed_in_a_study_that_its_recordings_do_not_fit_is_said(tmp_path):
    recipe = kept(pair(tmp_path / "a.csv"))
    path = tmp_path / "night.h5"
    study.gather([tmp_path / "a.csv"], path, recipe)
    changed = recipe.with_settings(['intake.layouts.rig.channels.force={role="other"}'])
    with study.Study.open(path) as opened, pytest.raises(InputError, match="it has no 'force'"):
        opened.analysis(changed).traces  # noqa: B018


# -- in the recipe ----------------------------------------------------------------------------------------------------

names = st.text(st.characters(codec="utf-8", exclude_categories=("C",)), min_size=1, max_size=20)
numbers = st.floats(allow_nan=False, allow_infinity=False, width=32)
channels = st.builds(
    KeptChannel,
    role=st.sampled_from(ROLES),
    unit=st.sampled_from(["", "nA", "µA", "G0", "quaint"]),
    scale=st.none() | numbers,
    offset=st.none() | numbers,
    file_unit=st.none() | st.sampled_from(["", "nA"]),
    file_scale=numbers,
    file_offset=numbers,
    numbers=st.none() | st.sampled_from(["whole", "real"]),
    shared=st.none() | st.booleans(),
)
layouts = st.builds(
    KeptLayout,
    reader=names,
    arrangement=names,
    layout=st.sampled_from(["auto", "wide", "rows"]),
    binary_type=st.none() | st.sampled_from(["int16", "float64"]),
    binary_header_byte=st.integers(0, 4096),
    binary_channels=st.lists(names, max_size=3),
    channels=st.dictionaries(names, channels, max_size=4),
)
layout_names = names.map(lambda text: " ".join(text.split())).filter(
    lambda text: text.isprintable() and text not in ("", "none")
)


@given(st.dictionaries(layout_names, layouts, max_size=3))
def test_layouts_come_back_from_toml_as_they_were(found):
    recipe = Recipe().with_values("intake", layouts={name: one.model_dump() for name, one in found.items()})
    assert recipe.intake.layouts == found
    for comments in (False, True):
        assert Recipe.parse(recipe.text(comments)) == recipe


@given(layouts, layouts)
def test_a_recipe_file_takes_a_layout_and_keeps_its_remarks(tmp_path_factory, first, second):
    path = tmp_path_factory.mktemp("recipe") / "lab.toml"
    path.write_text("# our laboratory\n[calibration]\nbias_volt = 0.1  # since March\n", encoding="utf-8")
    keep_in_file(path, "one", first, Recipe())
    said = keep_in_file(path, "two", second, Recipe())
    assert said == []
    text, read = path.read_text(encoding="utf-8"), Recipe.load(path)
    assert "# our laboratory" in text and "# since March" in text
    assert read.intake.layouts == {"one": first, "two": second}
    assert read.calibration.bias_volt == 0.1
    keep_in_file(path, "one", second, Recipe())
    assert Recipe.load(path).intake.layouts == {"one": second, "two": second}


@pytest.mark.parametrize(
    "text",
    [
        "[intake]\nlayouts = {}\n",
        '[intake]\nlayouts = {old = {reader = "text"}}\n[cutting]\nmethod = "none"\n',
        'intake = {layout = "wide"}\n',
        'intake.layout = "wide"\n',
        '[intake]\nuse_layout = "old"\n[intake.layouts.old]\nreader = "text"\n# end\n[cutting]\n',
    ],
)
def test_any_form_of_a_recipe_file_takes_a_layout(tmp_path, text):
    path = tmp_path / "lab.toml"
    path.write_text(text, encoding="utf-8")
    before = Recipe.load(path)
    keep_in_file(path, "new", KeptLayout(reader="HDF5"), Recipe())
    after = Recipe.load(path)
    assert after.intake.layouts == before.intake.layouts | {"new": KeptLayout(reader="HDF5")}
    assert after.intake.layout == before.intake.layout and after.cutting == before.cutting
    assert after.intake.use_layout is None


def test_a_file_that_is_no_recipe_is_left_as_it_is(tmp_path):
    path = tmp_path / "notes.toml"
    path.write_text("[remarks]\na = 1\n", encoding="utf-8")
    with pytest.raises(RecipeError):
        keep_in_file(path, "new", KeptLayout(), Recipe())
    assert path.read_text(encoding="utf-8") == "[remarks]\na = 1\n"
    assert [one.name for one in tmp_path.iterdir()] == ["notes.toml"]


@pytest.mark.parametrize("name", ["none", " rig", "a\nb", ""])
def test_what_is_no_name_for_a_layout_is_refused(name):
    with pytest.raises(RecipeError, match="no name for a layout"):
        with_layout(Recipe(), name, KeptLayout())


def test_a_layout_that_is_not_there_cannot_be_used():
    with pytest.raises(RecipeError, match="'rig'"):
        Recipe().with_settings(["intake.use_layout=rig"])


@pytest.mark.parametrize(
    ("words", "arrangement"),
    [
        ("comma-separated, 3 columns", "columns"),
        ("tab-separated, 1 column, 12 blocks", "columns"),
        ("blank-separated, 100 traces side by side", "traces side by side"),
        ("4 tables in a zip; the first: comma-separated, 2 columns", "columns"),
        ("2D dataset, traces in rows, 1 piece", "2D dataset, traces in rows"),
        ("2 channels of int16 in turn", "channels of int16 in turn"),
    ],
)
def test_the_arrangement_counts_nothing(words, arrangement):
    assert arrangement_of(words) == arrangement
