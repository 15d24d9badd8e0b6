"""Two gains and switched ranges: seams, hysteresis, dead time, the fitted ratio; plain twins of the kernels."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from intake_files import G0_SIEMENS, recipe, record, volts

from meseta import intake
from meseta.errors import InputError
from meseta.intake.assembly import plan_of
from meseta.intake.calibration.kernels import choose_gain, flag_slewing, flag_switches
from meseta.traces import Quality
from meseta.work import Work

BIAS = 0.1
LOW, HIGH = 1e5, 1e8
STATED = {"gain_volt_per_ampere": LOW, "high_gain_volt_per_ampere": HIGH, "bias_volt": BIAS, "full_scale_volt": 10.0}


def two_gain(folder, ampere, true_high=HIGH, offset_ampere=0.0, noise=0.0, seed=0):
    rng = np.random.default_rng(seed)
    ampere = np.asarray(ampere, float)
    low = np.clip(ampere * LOW + noise * rng.normal(size=ampere.shape), -10, 10)
    high = np.clip((ampere + offset_ampere) * true_high, -10, 10)
    return record(
        folder, amplifier=volts(low), amplifier_high_gain=(high, {"unit": "V", "role": "amplifier_high_gain"})
    )


def plain_switches(share, begins, leave, back, dead):
    """The definition, word by word (twin of both kernels): states, seams, dead samples."""
    use, seam, untrusted = [], [False] * len(share), [False] * len(share)
    bounds = [*begins, len(share)]
    for begin, end in itertools.pairwise(bounds):
        high, switched = None, None
        for index in range(begin, end):
            if high is None:
                high = share[index] < leave
            elif share[index] >= leave:
                high = False
            elif share[index] < back:
                high = True
            use.append(bool(high) and not np.isnan(share[index]))
        states = use[begin:end]
        for index in range(begin + 1, end):
            if states[index - begin] != states[index - begin - 1]:
                seam[index - 1] = seam[index] = True
                switched = index
            if switched is not None and index < switched + dead:
                untrusted[index] = True
    return use, seam, untrusted


@settings(deadline=None, max_examples=200)
@given(
    st.lists(st.one_of(st.floats(0, 1), st.just(float("nan"))), min_size=1, max_size=60),
    st.sets(st.integers(1, 59), max_size=3),
    st.sampled_from([(0.9, 0.9), (0.9, 0.5), (0.5, 0.1)]),
    st.integers(0, 5),
)
def test_kernels_equal_the_definition(share, inner, shares, dead):
    values = np.array(share)
    begins = np.array([0, *sorted(at for at in inner if at < len(share))], np.int64)
    use, bits = np.empty(len(share), np.bool_), np.zeros(len(share), np.uint8)
    choose_gain(values, begins, *shares, use)
    flag_switches(use.astype(np.int64), begins, dead, Quality.SEAM, Quality.UNTRUSTED, bits)
    expected, seam, untrusted = plain_switches(share, begins.tolist(), *shares, dead)
    assert use.tolist() == expected
    assert ((bits & Quality.SEAM) > 0).tolist() == seam
    assert ((bits & Quality.UNTRUSTED) > 0).tolist() == untrusted


@pytest.mark.parametrize("scale", [1.0, 1e-6])
def test_slew_flags_equal_numpy(scale):
    rng = np.random.default_rng(5)
    values = np.cumsum(rng.normal(size=400)) * scale
    begins = np.array([0, 57, 200], np.int64)
    bits = np.zeros(400, np.uint8)
    flag_slewing(values, begins, 1.5 * scale, Quality.SLEWING, bits)
    fast = np.abs(np.diff(values)) >= 1.5 * scale
    fast[begins[1:] - 1] = False
    expected = np.append(fast, False) | np.insert(fast, 0, False)
    np.testing.assert_array_equal(bits == Quality.SLEWING, expected)


def test_hysteresis_keeps_noise_at_the_crossover_from_switching(tmp_path):
    """Readings that wander between 0.7 and 0.95 of full scale: one seam on the way up, one on the way down."""
    wander = 0.83 + 0.12 * np.sin(np.arange(400) * 1.7)
    share = np.concatenate([np.linspace(0, 0.8, 50), wander, np.linspace(0.75, 0.1, 50)])
    path = two_gain(tmp_path, share * 10 / HIGH)
    plain = intake.read(path, recipe(**STATED)).quality.read(0, 500)
    held = intake.read(path, recipe(**STATED, crossover_back_share=0.6)).quality.read(0, 500)
    assert np.count_nonzero(plain & Quality.SEAM) > 100
    assert np.count_nonzero(held & Quality.SEAM) == 4
    conductance = intake.read(path, recipe(**STATED, crossover_back_share=0.6)).conductance
    np.testing.assert_allclose(conductance, share * 10 / HIGH / (BIAS * G0_SIEMENS), rtol=1e-6)


def test_dead_time_after_a_switch_is_not_trusted(tmp_path):
    share = np.concatenate([np.full(100, 2.0), np.full(100, 0.5), np.full(100, 2.0)])
    path = two_gain(tmp_path, share * 10 / HIGH)
    traces = intake.read(path, recipe(**STATED, dead_time_second=1e-3, sampling_hertz=1e4))
    bits = traces.quality.read(0, 300)
    assert np.flatnonzero(bits & Quality.UNTRUSTED).tolist() == [*range(100, 110), *range(200, 210)]
    assert np.flatnonzero(bits & Quality.SEAM).tolist() == [99, 100, 199, 200]
    with pytest.raises(InputError, match="no sampling rate"):
        intake.read(path, recipe(**STATED, dead_time_second=1e-3))


@pytest.mark.parametrize(
    "ask", [{"crossover_back_share": 0.3, "dead_time_second": 2e-3}, {"slew_volt_per_second": 2e3}]
)
def test_flags_do_not_depend_on_how_a_record_is_read(tmp_path, ask):
    """A range that is read on its own has the bits of the same range in the whole record."""
    rng = np.random.default_rng(3)
    share = np.abs(np.cumsum(rng.normal(size=3000)) * 0.03)
    path = two_gain(tmp_path, np.minimum(share, 30) * 10 / HIGH)
    made = recipe(**STATED, **ask, sampling_hertz=1e4)
    with intake.open_recording(path) as recording:
        part = plan_of(recording, made)
        whole = part.calibration.apply(part.recording, 0, 3000)
        assert whole.quality.any()
        for start, stop in ((1, 2), (700, 1300), (1299, 1301), (2990, 3000)):
            found = part.calibration.apply(part.recording, start, stop)
            np.testing.assert_array_equal(found.conductance, whole.conductance[start:stop])
            bits = np.zeros(stop - start, np.uint8) if found.quality is None else found.quality
            np.testing.assert_array_equal(bits, whole.quality[start:stop])


def contacts(rng, count=40):
    row = np.concatenate([np.full(100, 1e-5), 10 ** np.linspace(-5, -9.5, 300), np.full(200, 3e-10)])
    return np.tile(row, count) * (1 + 0.002 * rng.normal(size=600 * count))


@pytest.mark.parametrize("noise", [2e-5, 2e-3])
def test_gain_ratio_and_offset_are_fitted_and_used_only_when_asked(tmp_path, noise):
    """High gain 7 % above what is stated and 0.5 nA off: both come back; 2 mV of noise do not flatten the line.

    In the overlap the low-gain channel reads 1 to 9 mV: fitted the other way round the ratio would come out a third
    too small.
    """
    ampere = contacts(np.random.default_rng(6))
    path = two_gain(tmp_path, ampere, 1.07 * HIGH, 5e-10, noise)
    as_stated, scaled = recipe(**STATED), recipe(**STATED, gain_ratio_from_overlap=True)
    note = intake.read(path, as_stated).notes["calibration"]
    ratio, error = note["overlap_ratio"]["value"], note["overlap_ratio_error"]["value"]
    assert ratio == pytest.approx(1.07, abs=4 * error)
    assert error < 0.025
    assert note["overlap_offset_ampere"]["value"] == pytest.approx(1.07 * 5e-10, abs=100e-10 * noise / 2e-3)
    assert note["overlap_ratio"]["from"] == "fitted in the overlap, not used"
    floor = slice(500, 600)
    expected = ampere[floor].mean() / (BIAS * G0_SIEMENS)
    assert intake.read(path, as_stated).conductance[floor].mean() > 2 * expected
    traces = intake.read(path, scaled)
    assert any("scaled by this" in text for text in traces.notes["assumptions"])
    if noise < 1e-3:
        assert traces.conductance[floor].mean() == pytest.approx(expected, rel=0.1)


def test_errors_of_the_ratio_are_honest(tmp_path):
    """30 recordings: the ratio lies within two standard errors about as often as it should."""
    inside = 0
    for seed in range(30):
        path = two_gain(tmp_path, contacts(np.random.default_rng(seed), 10), HIGH, 0.0, 2e-3, seed)
        note = intake.read(path, recipe(**STATED)).notes["calibration"]
        inside += abs(note["overlap_ratio"]["value"] - 1) < 2 * note["overlap_ratio_error"]["value"]
    assert inside >= 24  # 28.6 expected; fewer than 24 has a probability below 0.001


def test_errors_of_the_ratio_hold_for_slow_noise_in_a_short_record(tmp_path):
    """Noise that wanders on a short record: the ratio is off by one standard error on average, not by several.

    The root mean square of (fitted - true) / error over 30 recordings is 1 by definition of the standard error
    (JCGM 100:2008, 2.3.1); 1.6 leaves room for 30 draws and the jackknife's own scatter.
    """
    pulls = []
    for seed in range(30):
        rng = np.random.default_rng(seed)
        ampere = contacts(rng, 20)
        wander = np.zeros(len(ampere))
        for index in range(1, len(wander)):
            wander[index] = 0.97 * wander[index - 1] + rng.normal()
        low = ampere * LOW + 1e-4 * wander
        high = np.clip(ampere * 1.03 * HIGH, -10, 10)
        path = record(
            tmp_path, amplifier=volts(low), amplifier_high_gain=(high, {"unit": "V", "role": "amplifier_high_gain"})
        )
        note = intake.read(path, recipe(**STATED)).notes["calibration"]
        pulls.append((note["overlap_ratio"]["value"] - 1.03) / note["overlap_ratio_error"]["value"])
    assert np.sqrt(np.mean(np.square(pulls))) < 1.6


def test_an_amplifier_that_records_its_range(tmp_path):
    code = np.repeat([2, 5, 2], 100)
    gain = np.where(code == 2, 1e6, 1e9)
    ampere = np.where(code == 2, 1e-6, 1e-10)
    path = record(tmp_path, amplifier=volts(ampere * gain), range_code=(code.astype(np.int16), {"role": "range_code"}))
    made = recipe(range_gains={"2": 1e6, "5": 1e9}, bias_volt=BIAS, dead_time_second=3e-4, sampling_hertz=1e4)
    traces = intake.read(path, made)
    np.testing.assert_allclose(traces.conductance, ampere / (BIAS * G0_SIEMENS), rtol=1e-6)
    bits = traces.quality.read(0, 300)
    assert np.flatnonzero(bits & Quality.UNTRUSTED).tolist() == [100, 101, 102, 200, 201, 202]
    with pytest.raises(InputError, match="range code 5"):
        intake.read(path, recipe(range_gains={"2": 1e6}, bias_volt=BIAS))
    bare = record(tmp_path, amplifier=volts(ampere))
    with pytest.raises(InputError, match="no channel has the role range_code"):
        intake.read(bare, recipe(range_gains={"2": 1e6}, bias_volt=BIAS))


def test_blocks_of_any_size_give_the_same_traces(tmp_path):
    rng = np.random.default_rng(9)
    path = two_gain(tmp_path, contacts(rng, 5).reshape(5, 600))
    made = recipe(**STATED, crossover_back_share=0.2, dead_time_second=5e-3, sampling_hertz=1e3)
    made = made.with_values("intake", layout="rows")
    whole = intake.read(path, made)
    small = intake.read(path, made, Work(block_samples=64))
    assert whole.traces == 5
    np.testing.assert_array_equal(whole.conductance, small.conductance)
    np.testing.assert_array_equal(whole.quality.read(0, 3000), small.quality.read(0, 3000))
