"""Planted calibration mistakes and what the check-up says of them."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

from meseta import intake
from meseta.intake.assembly import plan_of
from meseta.intake.calibration.two_gain import overlap_of
from meseta.intake.checks.check_up import Finding
from meseta.recipe import Recipe

G0_SIEMENS = 7.748091729863649e-05  # CODATA 2022, 2e²/h
TRACES, SAMPLES = 60, 600


def contacts(seed: int = 8) -> np.ndarray:
    """(traces, samples) G0: disordered larger contacts, a single-atom plateau near 1 G0, then tunnelling."""
    rng = np.random.default_rng(seed)
    stairs = np.repeat([5.0, 4.0, 3.0, 2.0, 1.0], [20, 30, 40, 60, 150])
    rows = [
        np.concatenate([stairs * rng.normal(1, np.where(stairs > 1, 0.25, 0.02)), 10.0 ** -rng.uniform(2, 5, 300)])
        for _ in range(TRACES)
    ]
    return np.array(rows)


def record(folder: Path, **channels: tuple[np.ndarray, dict[str, object]]) -> Path:
    path = folder / "record.h5"
    with h5py.File(path, "w") as file:
        for name, (values, attributes) in channels.items():
            file.create_dataset(name, data=values).attrs.update(attributes)
    return path


def findings(path: Path, **calibration: object) -> dict[str, Finding]:
    described, _ = intake.describe(path, Recipe.build({"calibration": calibration, "intake": {"layout": "rows"}}))
    return {one.check: one for one in described[0].findings}


@pytest.mark.parametrize(("factor", "word"), [(2.0, "2"), (10.0, "10"), (100.0, "100")])
@pytest.mark.parametrize("side", ["low", "high"])
@pytest.mark.parametrize("constant", ["gain_volt_per_ampere", "bias_volt"])
def test_a_wrong_gain_or_bias_is_named_with_its_factor(tmp_path, factor, word, side, constant):
    """A gain or bias stated too large by a factor makes every conductance too small by it, and the reverse."""
    volts = contacts() * G0_SIEMENS * 0.1 * 1e4
    stated = {"gain_volt_per_ampere": 1e4, "bias_volt": 0.1}
    stated[constant] *= factor if side == "low" else 1 / factor
    found = findings(record(tmp_path, amplifier=(volts, {"unit": "V"})), **stated)["single-atom peak"]
    assert not found.fine
    assert f"a factor {word} too {side}" in found.text
    assert "divider" in found.text


def test_right_gain_is_left_alone_and_a_wrong_sign_is_named(tmp_path):
    path = record(tmp_path, amplifier=(contacts() * G0_SIEMENS * 0.1 * 1e4, {"unit": "V"}))
    right = findings(path, gain_volt_per_ampere=1e4, bias_volt=0.1)
    assert right["single-atom peak"].fine
    assert right["sign"].fine
    assert not findings(path, gain_volt_per_ampere=-1e4, bias_volt=0.1)["sign"].fine


@pytest.mark.parametrize(
    ("step", "fine", "said"),
    [
        (1e-6, True, "against a noise of"),
        (6e-4, True, "against a noise of"),
        (1.5e-3, True, "the floor lies within one converter step"),
        (5e-3, True, "the floor lies within one converter step"),
        (0.1, False, "too coarse to tell contacts apart"),
    ],
)
def test_converter_step_against_the_noise_of_the_floor(tmp_path, step, fine, said):
    """Values are rounded to the step; one far above the scatter of 0.5 mG0 hides it, 0.1 G0 is a mistake."""
    rng = np.random.default_rng(3)
    values = contacts()
    values[:, 300:] = rng.normal(0, 5e-4, (TRACES, 300))
    found = findings(record(tmp_path, conductance=(np.round(values / step) * step, {"unit": "G0"})))["converter step"]
    assert found.fine == fine
    assert said in found.text
    assert "noise of 0 G0" not in found.text


@pytest.mark.parametrize(("share_of_bound", "fine"), [(30.0, True), (1 / 30, False)])
def test_a_floor_quieter_than_thermal_noise_is_named(tmp_path, share_of_bound, fine):
    """Johnson noise i² = 4 k T G B (Nyquist, Phys. Rev. 32, 110) of the conductance that the noise itself stands for.

    With noise s G0 as the conductance, s lies below 2 % of its thermal noise where s < 0.02² 4 k T B / (V² G0).
    """
    from scipy import constants

    rate, bias = 1e4, 0.1
    bound = 0.02**2 * 4 * constants.k * 300.0 * (rate / 2) / (bias**2 * G0_SIEMENS)
    rng = np.random.default_rng(5)
    values = contacts()
    values[:, 300:] = rng.normal(0, bound * share_of_bound, (TRACES, 300))
    path = record(tmp_path, current=(values * G0_SIEMENS * bias * 1e9, {"unit": "nA"}))
    assert findings(path, bias_volt=bias, sampling_hertz=rate)["floor"].fine == fine


@pytest.mark.parametrize(("factor", "said"), [(1.0, ""), (10.0, "10 times too large"), (0.1, "10 times too small")])
def test_displacement_off_by_a_factor_shows_in_the_tunnelling_slope(tmp_path, factor, said):
    """Vacuum tunnelling of 10 decades per nm (2 kappa for a work function near 5 eV)."""
    nm = np.arange(SAMPLES) * 0.002
    values = np.where(nm < 0.3, 1.0, 0.003 * 10.0 ** (-10.0 * (nm - 0.3))) * np.ones((TRACES, 1))
    path = record(tmp_path, conductance=(values, {"unit": "G0"}), displacement=(nm * factor, {"unit": "nm"}))
    found = findings(path)["tunnelling slope"]
    assert found.fine == (not said)
    assert said in found.text


@pytest.mark.parametrize(("plateau", "fine"), [(1.0, True), (0.5, False), (0.45, False)])
def test_a_plateau_at_the_zero_is_named_and_a_level_below_it_proposed(tmp_path, plateau, fine):
    """Plateaus of 150 samples with 10 % of noise: the last crossing of 0.5 G0 lies anywhere within those near it."""
    rng = np.random.default_rng(2)
    rows = []
    for _ in range(TRACES):
        begin = int(rng.integers(80, 150))
        steps = [np.full(begin, 3.0), np.full(150, plateau), 1e-3 * 10.0 ** -np.linspace(0, 3, SAMPLES - 150 - begin)]
        rows.append(np.concatenate(steps) * rng.normal(1, 0.1, SAMPLES))
    nm = np.arange(SAMPLES) * 0.002
    path = record(tmp_path, conductance=(np.array(rows), {"unit": "G0"}), displacement=(nm, {"unit": "nm"}))
    described, _ = intake.describe(path, Recipe())
    found = {one.check: one for one in described[0].findings}["zero of displacement"]
    assert found.fine == fine
    assert ("back and forth" in found.text) != fine
    assert described[0].proposed_zero_g0 == (None if fine else 0.3)


@pytest.mark.parametrize(("top", "proposed"), [(5.0, None), (0.3, 0.2)])
def test_a_zero_that_openings_do_not_cross_is_named_and_another_proposed(tmp_path, top, proposed):
    rng = np.random.default_rng(2)
    row = np.concatenate([top * np.linspace(1.0, 0.9, 200), top * 10.0 ** -np.linspace(0.1, 5, 400)])
    values = row * rng.normal(1, 0.01, (TRACES, SAMPLES))
    nm = np.arange(SAMPLES) * 0.002
    path = record(tmp_path, conductance=(values, {"unit": "G0"}), displacement=(nm, {"unit": "nm"}))
    described, _ = intake.describe(path, Recipe())
    found = {one.check: one for one in described[0].findings}["zero of displacement"]
    assert found.fine == (proposed is None)
    assert described[0].proposed_zero_g0 == proposed


@pytest.mark.parametrize(("true_gain", "fine"), [(1e8, True), (1.1e8, False)])
def test_two_gains_are_compared_in_their_overlap(tmp_path, true_gain, fine):
    """Gain ratio and offset that were put in come back from the overlap; a gain off by 10 % is named."""
    rng = np.random.default_rng(4)
    ampere = contacts() * G0_SIEMENS * 0.1
    low = ampere * 1e5 + rng.normal(0, 2e-6, ampere.shape)
    high = np.clip((ampere + 2e-10) * true_gain, -10, 10)
    path = record(
        tmp_path,
        amplifier=(low, {"unit": "V"}),
        amplifier_high_gain=(high, {"unit": "V", "role": "amplifier_high_gain"}),
    )
    stated = {"gain_volt_per_ampere": 1e5, "high_gain_volt_per_ampere": 1e8, "bias_volt": 0.1}
    found = findings(path, **stated, full_scale_volt=10.0)["gain ratio"]
    assert found.fine == fine
    ratio = true_gain / 1e8
    recipe = Recipe.build({"calibration": {**stated, "full_scale_volt": 10.0}})
    with intake.open_recording(path) as recording:
        part = plan_of(recording, recipe)
        overlap = overlap_of(part.recording, part.calibration)
    assert overlap is not None
    assert overlap.ratio == pytest.approx(ratio, abs=4 * overlap.ratio_error)
    assert overlap.offset_ampere == pytest.approx(2e-10 * ratio, rel=0.05)
    assert not any("no full scale" in one for one in intake.read(path, recipe).notes["assumptions"])
    without = intake.read(path, Recipe.build({"calibration": stated})).notes["assumptions"]
    assert any("no full scale is stated" in one for one in without)


@pytest.mark.parametrize(
    ("stated", "fine", "said"),
    [(10.0, True, ""), (100.0, False, "factor 10 below"), (1.0, False, "factor 10 above"), (20.0, False, "factor 2")],
)
def test_full_scale_off_by_a_factor_names_the_converter(tmp_path, stated, fine, said):
    """Readings pile up at 10 V, the end of the converter, whatever full scale is stated."""
    rng = np.random.default_rng(6)
    clipped = np.clip(contacts() * 7.5 + 1e-3 * rng.normal(size=(TRACES, SAMPLES)), -10, 10)
    path = record(tmp_path, amplifier=(clipped, {"unit": "V"}))
    gain = 7.5 / (G0_SIEMENS * 0.1)
    found = findings(path, gain_volt_per_ampere=gain, bias_volt=0.1, full_scale_volt=stated)["full scale"]
    assert found.fine == fine
    assert said in found.text


@pytest.mark.parametrize(("share", "fine"), [(1.0, True), (0.02, False)])
def test_a_floor_quieter_than_the_feedback_resistor_is_named(tmp_path, share, fine):
    """10 Mohm alone have 2.88 pA rms in 5 kHz at 300 K: sqrt(4 k T B / R) (Nyquist, Phys. Rev. 32, 110)."""
    from scipy import constants

    ampere = np.sqrt(4 * constants.k * 300.0 * 5e3 / 1e7)
    assert ampere == pytest.approx(2.878e-12, rel=1e-3)
    rng = np.random.default_rng(7)
    values = contacts() * G0_SIEMENS * 0.1
    values[:, 300:] = rng.normal(0, share * ampere, (TRACES, 300))
    path = record(tmp_path, amplifier=(values * 1e7, {"unit": "V"}))
    found = findings(path, gain_volt_per_ampere=1e7, bias_volt=0.1, sampling_hertz=1e4)["floor"]
    assert found.fine == fine
    assert "1e+07 ohm" in found.text


@pytest.mark.parametrize(("amplitude", "fine"), [(0.0, True), (5e-4, True), (1e-2, False)])
def test_mains_pickup_is_reported_against_the_noise(tmp_path, amplitude, fine):
    rng = np.random.default_rng(8)
    volts = contacts() * G0_SIEMENS * 0.1 * 1e5
    volts[:, 300:] = 1e-3 * rng.normal(size=(TRACES, 300))
    time = np.arange(volts.size).reshape(volts.shape) / 5e3
    path = record(tmp_path, amplifier=(volts + amplitude * np.sin(2 * np.pi * 50 * time), {"unit": "V"}))
    found = findings(path, gain_volt_per_ampere=1e5, bias_volt=0.1, sampling_hertz=5e3)["mains pickup"]
    assert found.fine == fine
    assert ("remove_mains" in found.text) != fine
    if amplitude:
        words = found.text.split()
        assert float(words[0]) == pytest.approx(50.0, abs=0.1 if amplitude > 1e-3 else 0.7)
        assert float(words[3]) == pytest.approx(amplitude, abs=2e-4)


@pytest.mark.parametrize("hertz", [50.0, 60.0])
@pytest.mark.parametrize(("stated", "side"), [(5e3, ""), (1e4, "high"), (2.5e3, "low")])
def test_mains_at_twice_or_half_their_frequency_are_a_wrong_sampling_rate(tmp_path, hertz, stated, side):
    """Sampled at 5 kHz; mains have 50 or 60 Hz (IEC 60038), so that a line at 25 or 120 Hz tells of the rate."""
    rng = np.random.default_rng(8)
    volts = contacts() * G0_SIEMENS * 0.1 * 1e5
    volts[:, 300:] = 1e-3 * rng.normal(size=(TRACES, 300))
    time = np.arange(volts.size).reshape(volts.shape) / 5e3
    path = record(tmp_path, amplifier=(volts + 4e-3 * np.sin(2 * np.pi * hertz * time), {"unit": "V"}))
    found = findings(path, gain_volt_per_ampere=1e5, bias_volt=0.1, sampling_hertz=stated)["mains pickup"]
    assert not found.fine
    assert ("sampling rate" in found.text) == bool(side)
    assert not side or f"a factor 2 too {side}" in found.text


@pytest.mark.parametrize(("told", "fine"), [("rising", True), ("falling", False)])
def test_pulling_told_the_wrong_way_round_is_named(tmp_path, told, fine):
    drive = np.tile(np.concatenate([np.linspace(0, 5, 900), np.linspace(5, 0, 300)]), 8)
    conductance = np.where(drive < 2.0, 10.0 - 4 * drive, 10 ** (-(drive - 2.0) * 1.5))
    path = record(tmp_path, piezo=(drive, {"unit": "V"}), conductance=(conductance, {"unit": "G0"}))
    described, _ = intake.describe(path, Recipe.build({"cutting": {"pull_is": told}}))
    found = {one.check: one for one in described[0].findings}["direction"]
    assert found.fine == fine
    assert ("cutting.pull_is" in found.text) != fine


@pytest.mark.parametrize("kind", ["metal", "molecule", "tunnelling", "blank"])
@pytest.mark.parametrize(("amplifier", "raw"), [("logarithmic", True), ("two gains", True), ("linear", False)])
def test_good_recordings_raise_no_alarm(tmp_path, kind, amplifier, raw):
    from meseta.simulate import SimulationSettings, write_simulation

    chosen = {
        "logarithmic": SimulationSettings(amplifier="logarithmic"),
        "two gains": SimulationSettings(gain_volt_per_ampere=1e5, high_gain_volt_per_ampere=1e8),
        "linear": SimulationSettings(),
    }[amplifier]
    write_simulation(kind, 24, 3, tmp_path / "good.h5", raw=raw, settings=chosen)
    described, _ = intake.describe(tmp_path / "good.h5", Recipe())
    assert [one.line() for one in described[0].findings if not one.fine] == []
    assert len(described[0].findings) >= 7


@pytest.fixture(scope="module")
def right(tmp_path_factory):
    """Return a raw recording that states what is right, with its settings."""
    from meseta.simulate import SimulationSettings, write_simulation

    chosen = SimulationSettings(gain_volt_per_ampere=1e5, high_gain_volt_per_ampere=1e8)
    path = tmp_path_factory.mktemp("right") / "raw.h5"
    write_simulation("metal", 24, 5, path, raw=True, settings=chosen)
    return path, chosen


@pytest.mark.parametrize(
    ("setting", "factor", "check", "said"),
    [
        ("gain_volt_per_ampere", 10.0, "single-atom peak", "factor 10 too low"),
        ("bias_volt", 0.01, "single-atom peak", "factor 100 too high"),
        ("bias_volt", 2.0, "single-atom peak", "factor 2 too low"),
        ("bias_volt", -1.0, "sign", "wrong sign"),
        ("nm_per_volt", 10.0, "tunnelling slope", "too large"),
        ("nm_per_volt", 0.1, "tunnelling slope", "too small"),
        ("full_scale_volt", 10.0, "full scale", "factor 10 below"),
        ("high_gain_volt_per_ampere", 2.0, "gain ratio", "do not fit each other"),
    ],
)
def test_mistakes_in_a_simulated_recording_are_named(right, setting, factor, check, said):
    """The recording states what is right; the recipe gets it wrong by a factor."""
    path, chosen = right
    wrong = {setting: getattr(chosen, setting) * factor}
    if setting == "gain_volt_per_ampere":
        wrong["high_gain_volt_per_ampere"] = chosen.high_gain_volt_per_ampere * factor
    described, _ = intake.describe(path, Recipe.build({"calibration": wrong}))
    found = {one.check: one for one in described[0].findings}[check]
    assert not found.fine
    assert said in found.text


@pytest.mark.parametrize(
    ("stated", "check", "said"),
    [
        ({}, "", ""),
        ({"volt_per_decade": 1.6}, "single-atom peak", "V would do it instead of 1.6 V"),
        ({"volt_per_decade": -0.8}, "direction", "opposite polarity"),
        ({"log_polarity": "both"}, "sign", "show sizes only"),
        ({"reference_ampere": 1e-8}, "single-atom peak", "factor 10 too high"),
    ],
)
def test_mistakes_with_a_logarithmic_amplifier_are_named(tmp_path, stated, check, said):
    """U = s lg(I / I_ref), worked here: 0.8 V a decade, 1 nA."""
    values = np.maximum(contacts(), 1e-9) * G0_SIEMENS * 0.1
    values[:, -100:] = 3e-14  # below the reference current, so that volts go negative
    path = record(tmp_path, amplifier=(0.8 * np.log10(values / 1e-9), {"unit": "V"}))
    with h5py.File(path, "a") as file:
        file.attrs["direction"] = "opening"
    right = {"volt_per_decade": 0.8, "reference_ampere": 1e-9, "bias_volt": 0.1}
    found = findings(path, **(right | stated))
    if not check:
        assert all(found[name].fine for name in ("single-atom peak", "direction", "sign"))
    else:
        assert not found[check].fine
        assert said in found[check].text
    if stated.get("volt_per_decade") == 1.6:
        assert float(found[check].text.split("volt_per_decade, ")[1].split()[0]) == pytest.approx(0.8, rel=0.03)


@pytest.mark.parametrize(("volt_per_decade", "flipped", "named"), [(0.8, 1, False), (-0.8, 1, True), (0.8, -1, False)])
def test_opposite_polarity_is_named_where_nothing_tells_the_direction(tmp_path, volt_per_decade, flipped, named):
    """Without a drive all traces seem to close; traces that do close (the last case) are none of its business."""
    values = np.maximum(contacts(), 1e-7)[:, ::flipped] * G0_SIEMENS * 0.1
    path = record(tmp_path, amplifier=(0.8 * np.log10(values / 1e-9), {"unit": "V"}))
    found = findings(path, volt_per_decade=volt_per_decade, reference_ampere=1e-9, bias_volt=0.1)
    assert ("opposite polarity" in found["direction"].text if "direction" in found else False) == named
    assert named or all(one.fine for name, one in found.items() if name in ("direction", "single-atom peak"))


def test_contacts_of_two_three_and_four_atoms_as_often_as_of_one_are_no_factor_of_two(tmp_path):
    """Plateaus of equal length at 1, 2, 3 and 4 G0, the higher ones sharper: the strongest is not the single atom."""
    for seed in range(20):
        rng = np.random.default_rng(seed)
        levels, spread = np.repeat([8.0, 4.0, 3.0, 2.0, 1.0], 60), np.repeat([0.2, 0.02, 0.02, 0.02, 0.03], 60)
        rows = [np.concatenate([levels * rng.normal(1, spread), 10.0 ** -rng.uniform(2, 5, 300)]) for _ in range(20)]
        path = record(tmp_path, amplifier=(np.array(rows) * G0_SIEMENS * 0.1 * 1e4, {"unit": "V"}))
        found = findings(path, gain_volt_per_ampere=1e4, bias_volt=0.1)["single-atom peak"]
        assert found.fine, found.text
        high = findings(path, gain_volt_per_ampere=5e3, bias_volt=0.1)["single-atom peak"]
        assert not high.fine, high.text


@pytest.mark.parametrize(
    ("stated", "said"),
    [
        ({"gain_volt_per_ampere": 1e8, "high_gain_volt_per_ampere": 1e5}, "swapped"),
        ({"high_gain_volt_per_ampere": -1e8}, "wrong sign"),
        ({"high_gain_volt_per_ampere": 1e9}, "a factor 10 too large"),
        ({"gain_volt_per_ampere": 1e7}, "a factor 100 too small, or the first too large"),
    ],
)
def test_mistakes_with_one_of_two_gains_are_named(tmp_path, stated, said):
    ampere = contacts() * G0_SIEMENS * 0.1
    low = ampere * 1e5 + np.random.default_rng(4).normal(0, 2e-6, ampere.shape)
    path = record(
        tmp_path,
        amplifier=(low, {"unit": "V"}),
        amplifier_high_gain=(np.clip(ampere * 1e8, -10, 10), {"unit": "V", "role": "amplifier_high_gain"}),
    )
    right = {"gain_volt_per_ampere": 1e5, "high_gain_volt_per_ampere": 1e8, "bias_volt": 0.1, "full_scale_volt": 10.0}
    found = findings(path, **(right | stated))["gain ratio"]
    assert not found.fine
    assert said in found.text


@pytest.mark.parametrize(("position", "factor", "fine"), [(1.5, 1.0, True), (1.5, 2.0, False), (1.5, 10.0, False)])
def test_single_atoms_of_a_stated_metal_are_expected_where_they_are_known(tmp_path, position, factor, fine):
    """Pt at low bias: 1.5 G0 (Nielsen et al., PRB 67, 245411); off by 2 it would pass for a monovalent metal."""
    values = contacts()
    values[:, 150:300] *= position
    path = record(tmp_path, conductance=(values / factor, {"unit": "G0"}))
    with h5py.File(path, "a") as file:
        file.attrs["electrode"] = "Pt"
    found = findings(path)["single-atom peak"]
    assert found.fine == fine
    assert fine or f"a factor {factor:g} too low" in found.text


@pytest.mark.parametrize("gain", [1.0, 0.1])
def test_single_atoms_are_seen_below_a_saturated_amplifier(tmp_path, gain):
    """Full scale stands at 1.2 G0: openings begin saturated, which neither hides single atoms nor makes them odd."""
    unit = 10.0 / (1.2 * G0_SIEMENS * 0.1)
    path = record(tmp_path, amplifier=(np.clip(contacts() * 10.0 / 1.2, -10, 10), {"unit": "V"}))
    found = findings(path, gain_volt_per_ampere=unit * gain, bias_volt=0.1, full_scale_volt=10.0)
    assert found["single-atom peak"].fine == (gain == 1.0)
    assert ("factor 10 too high" in found["single-atom peak"].text) == (gain != 1.0)
    assert found["direction"].fine


@pytest.mark.parametrize(("medium", "fine"), [("vacuum", False), ("mesitylene", True), ("", True)])
def test_half_the_slope_of_vacuum_is_named_in_vacuum_only(tmp_path, medium, fine):
    """10 decades per nm are 2 kappa / ln 10 of 5 eV (textbook); 5 are those of 1.3 eV, which solvents do reach."""
    nm = np.arange(SAMPLES) * 0.002
    values = np.where(nm < 0.3, 1.0, 0.003 * 10.0 ** (-10.0 * (nm - 0.3))) * np.ones((TRACES, 1))
    path = record(tmp_path, conductance=(values, {"unit": "G0"}), displacement=(2.0 * nm, {"unit": "nm"}))
    with h5py.File(path, "a") as file:
        file.attrs["solvent"] = medium
    found = findings(path)["tunnelling slope"]
    assert found.fine == fine
    assert fine or "in vacuum: displacement is about 2 times too large" in found.text


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("values", [np.nan, np.inf, 0.0, 0.3, -1.0])
def test_odd_recordings_are_checked_without_warnings(tmp_path, values):
    path = record(tmp_path, amplifier=(np.full((20, 100), values), {"unit": "V"}))
    found = findings(path, gain_volt_per_ampere=1e6, bias_volt=0.1, sampling_hertz=1e4, full_scale_volt=10.0)
    assert not found["zero of displacement"].fine
