"""The recipe: one source for every setting, TOML in and out, errors in words."""

from __future__ import annotations

import tomllib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from meseta import Recipe
from meseta.errors import CallError, RecipeError

STABLE = [
    "calibration.bias_volt",
    "calibration.amplifier",
    "calibration.gain_volt_per_ampere",
    "calibration.offset_volt",
    "calibration.volt_per_decade",
    "calibration.reference_ampere",
    "calibration.series_resistance_ohm",
    "calibration.full_scale_volt",
    "calibration.nm_per_volt",
    "calibration.nm_per_second",
    "calibration.sampling_hertz",
    "cutting.pull_is",
    "intake.channels",
    "alignment.zero_at_g0",
    "plateaus.sensitivity",
    "histogram.axis",
    "histogram.bins_per_decade",
    "histogram.bin_width_g0",
    "histogram.low_g0",
    "histogram.high_g0",
    "histogram.direction",
    "resampling.replicates",
    "resampling.seed",
]


@pytest.mark.parametrize("name", STABLE)
def test_stable_names_exist(name):
    section, field = name.split(".")
    assert field in type(getattr(Recipe(), section)).model_fields


@pytest.mark.parametrize("preset", [None, "metal", "molecule"])
def test_text_reads_back_to_the_same_recipe(preset):
    recipe = Recipe.preset(preset) if preset else Recipe()
    assert Recipe.parse(recipe.text()) == recipe
    assert Recipe.parse(recipe.text(comments=True)) == recipe


def test_every_setting_has_title_and_help_in_the_commented_recipe():
    text = Recipe().text(comments=True)
    for name, section in Recipe().sections():
        for info in section.fields():
            assert info.title
            assert info.title in text, f"{name}.{info.name}"
    assert max(len(line) for line in text.splitlines() if line.startswith("#")) <= 120


def test_the_commented_recipe_names_unit_and_range():
    text = Recipe().text(comments=True)
    assert "# Zero at (in G0; above 0)." in text
    assert "# Conductance axis (linear | logarithmic)." in text
    assert "# bias_volt is not set: taken from the recording where it states it" in text


@pytest.mark.parametrize(
    ("setting", "says"),
    [
        ("calibraton.bias_volt=1", ["no section 'calibraton'", "did you mean 'calibration'?"]),
        ("plateaus.sensitivty=3", ["no setting 'plateaus.sensitivty'", "did you mean 'sensitivity'?"]),
        ("histogram.bin_width_g0=0", ["'histogram.bin_width_g0' cannot be 0", "above 0", "G0"]),
        ("histogram.axis=log", ["'histogram.axis' cannot be 'log'", "linear | logarithmic"]),
        ("calibration.bias_volt=many", ["'many'", "a number in V"]),
        ("calibration.bias_volt=nan", ["calibration.bias_volt"]),
    ],
)
def test_errors_name_the_setting_what_was_given_and_what_is_allowed(setting, says):
    with pytest.raises((RecipeError, CallError)) as caught:
        Recipe().with_settings([setting])
    for words in says:
        assert words in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_setting_without_value_is_a_call_error():
    with pytest.raises(CallError, match=r"section\.field=value"):
        Recipe().with_settings(["histogram"])


def test_settings_take_toml_values_and_bare_words():
    recipe = Recipe().with_settings(
        [
            "histogram.axis=linear",
            "calibration.bias_volt=0.1",
            'intake.channels={ch0={role="current",unit="nA"}}',
            "calibration.amplifier=none",
            "plateaus.low_g0=1e-5",
        ]
    )
    assert recipe.histogram.axis == "linear"
    assert recipe.calibration.bias_volt == 0.1
    assert recipe.intake.channels["ch0"].role == "current"
    assert recipe.calibration.amplifier == "none"
    assert recipe.plateaus.low_g0 == 1e-5


def test_unreadable_recipes_say_so(tmp_path):
    bad = tmp_path / "bad.toml"
    bad.write_text("[histogram\n")
    with pytest.raises(RecipeError, match="not valid TOML"):
        Recipe.load(bad)
    bad.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(RecipeError, match="UTF-8"):
        Recipe.load(bad)
    with pytest.raises(RecipeError, match="cannot be read"):
        Recipe.load(tmp_path / "none.toml")


def test_a_key_changes_only_with_the_settings_it_covers():
    one, other = Recipe(), Recipe().with_settings(["plateaus.sensitivity=7"])
    assert one.key(["histogram", "noise"]) == other.key(["histogram", "noise"])
    assert one.key(["plateaus"]) != other.key(["plateaus"])
    assert one.key(["plateaus.method"]) == other.key(["plateaus.method"])


@given(st.text(max_size=60))
def test_no_text_brings_anything_but_words(text):
    try:
        Recipe.parse(text)
    except RecipeError as error:
        assert "\n" not in str(error)


@given(st.floats(1e-6, 1e3), st.integers(1, 1000), st.text(max_size=20))
def test_values_survive_the_file(width, bins, specimen):
    recipe = Recipe().with_values("calibration", bias_volt=width).with_values("histogram", bins_per_decade=bins)
    recipe = recipe.with_values("intake", specimen=specimen)
    assert Recipe.parse(recipe.text()) == recipe
    assert tomllib.loads(recipe.text())["calibration"]["bias_volt"] == width


def test_a_quoted_name_may_hold_points_and_blanks():
    told = Recipe().with_settings(
        [
            'intake.channels."run 1.amp"={role="amplifier", unit="V"}',
            'intake.channels.b.unit="V"',
            'intake.channels.b.role="bias"',
            'calibration.range_gains."5"=1e6',
        ]
    )
    assert told.intake.channels["run 1.amp"].role == "amplifier"
    assert told.intake.channels["b"].role == "bias"
    assert told.calibration.range_gains == {"5": 1e6}
