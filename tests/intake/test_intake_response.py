"""Speed of the amplifier from the steepest falls: planted lags and slew limits come back."""

from __future__ import annotations

import numpy as np
import pytest
from intake_files import G0_SIEMENS, recipe, record, volts
from scipy.signal import bessel, butter, lfilter, sosfilt

from meseta import intake
from meseta.intake.checks.response import rise_times, slew_limit
from meseta.traces import Quality


def lagged(steps, constant_samples):
    """Return steps behind a first-order lag: y += (x - y) (1 - exp(-1/tau)), the exact answer to held samples."""
    share = 1 - np.exp(-1 / constant_samples)
    return lfilter([share], [1, share - 1], steps - steps[0]) + steps[0]


def broken(rng, filtered, level, rows=40, noise=0.002, samples=200, fine=64):
    """Return contacts that break at any moment between samples, behind a filter that runs 64 times as fast."""
    found = []
    for _ in range(rows):
        fallen = np.arange(samples * fine) >= (60 + rng.random()) * fine
        follow = (level - (level - 1e-7) * sosfilt(filtered, fallen.astype(float)))[::fine]
        found.append(follow * (1 + noise * rng.normal(size=samples)) + 1e-3 * level * rng.normal(size=samples))
    return found


FILTERS = {
    "first order": lambda share: butter(1, share, output="sos"),
    "two equal poles": lambda share: np.vstack([butter(1, share, output="sos")] * 2),
    "Butterworth": lambda share: butter(2, share, output="sos"),
    "Bessel": lambda share: bessel(4, share, norm="mag", output="sos"),
}


@pytest.mark.parametrize("cutoff", [3.0, 1.0, 0.4, 0.1, 0.03])
@pytest.mark.parametrize("kind", FILTERS)
@pytest.mark.parametrize("level", [1.0, 2e-4])
def test_the_rise_time_of_any_filter_is_covered_sampled_coarse_or_fine(kind, cutoff, level):
    """Filters of scipy.signal; 90 to 10 % as IEEE Std 181 defines it, read off their step response.

    The cutoff is a share of half the sampling rate: 0.03 are 22 samples and more a fall, 3 a fifth of a sample.
    """
    filtered = FILTERS[kind](cutoff / 64)
    response = sosfilt(filtered, np.ones(400 * 64))
    true = (np.argmax(response > 0.9) - np.argmax(response > 0.1)) / 64
    times = rise_times(broken(np.random.default_rng(1), filtered, level), lowest_g0=1e-6)
    assert len(times.level_g0) == 1
    assert 0.5 < times.level_g0[0] / level < 2
    assert abs(times.rise_samples[0] - true) <= times.error_samples[0]
    assert times.error_samples[0] <= max(1.0, 0.1 * true)


def test_an_amplifier_that_is_slower_at_small_currents_shows_it_and_slow_contacts_do_not_hide_it():
    """A first-order lag takes tau ln 9 (textbook): 3 samples from 1 G0, 15 from 1e-3 G0."""
    rng = np.random.default_rng(2)
    rows = []
    for place in range(60):
        level, constant = ((1.0, 3.0), (1e-3, 15.0))[place % 2]
        constant *= 4.0 if place % 3 == 0 else 1.0
        flat = np.full(int(rng.integers(20, 60)), level)
        rows.append(np.concatenate([flat, level * np.exp(-np.arange(12 * constant) / constant)]))
    times = rise_times(rows, lowest_g0=1e-6)
    np.testing.assert_allclose(times.rise_samples, np.log(9) * np.array([3, 15]), rtol=0.02)
    assert times.falls.tolist() == [30, 30]


def slewing(rng, rows, limit, samples=400):
    """Return staircases in volts behind an amplifier that changes by at most ``limit`` a sample."""
    found = []
    for _ in range(rows):
        steps = np.repeat([9.0, 6.0, 3.0, 1.5, 0.0], rng.integers(40, 100, 5))[:samples]
        follow = np.empty(len(steps))
        now = steps[0]
        for index, wanted in enumerate(steps):
            now += np.clip(wanted - now, -limit, limit)
            follow[index] = now
        found.append(follow + 1e-3 * rng.normal(size=len(follow)))
    return found


@pytest.mark.parametrize("limit", [0.15, 0.4])
def test_a_slew_limit_is_seen(limit):
    rows = slewing(np.random.default_rng(3), 30, limit)
    assert slew_limit(rows) == pytest.approx(limit, rel=0.02)
    assert slew_limit([1e-6 * row for row in rows]) == pytest.approx(1e-6 * limit, rel=0.02)


@pytest.mark.parametrize("constant_samples", [0.3, 3.0, 10.0])
def test_a_lag_is_no_slew_limit(constant_samples):
    rng = np.random.default_rng(4)
    rows = [lagged(np.repeat([9.0, 6.0, 3.0, 1.5, 0.0], rng.integers(60, 100, 5)), constant_samples) for _ in range(30)]
    assert slew_limit([row + 1e-3 * rng.normal(size=len(row)) for row in rows]) is None


def test_samples_at_the_slew_limit_are_flagged_and_the_file_check_names_it(tmp_path):
    rows = slewing(np.random.default_rng(5), 30, 0.25)
    length = min(len(row) for row in rows)
    path = record(tmp_path, amplifier=volts(np.array([row[:length] for row in rows])))
    stated = {"gain_volt_per_ampere": 1e5, "bias_volt": 0.1, "sampling_hertz": 1e4}
    made = recipe(**stated).with_values("intake", layout="rows")
    described, _ = intake.describe(path, made)
    found = {one.check: one for one in described[0].findings}["slew rate"]
    assert not found.fine
    assert float(found.text.split()[3]) == pytest.approx(2500, rel=0.02)  # V/s
    told = recipe(**stated, slew_volt_per_second=2500.0).with_values("intake", layout="rows")
    traces = intake.read(path, told)
    flagged = (traces.quality.read(0, traces.samples) & Quality.SLEWING > 0).reshape(30, length)
    steep = np.abs(np.diff(np.array([row[:length] for row in rows]), axis=1)) > 0.24
    assert flagged[:, :-1][steep].all() and flagged[:, 1:][steep].all()
    assert flagged.mean() < 0.3
    np.testing.assert_allclose(traces.conductance * 0.1 * G0_SIEMENS * 1e5, np.concatenate([r[:length] for r in rows]),
                               rtol=1e-5, atol=1e-7)  # fmt: skip
    described, _ = intake.describe(path, told)
    assert {one.check: one for one in described[0].findings}["slew rate"].fine
