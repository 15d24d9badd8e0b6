"""Speed of the amplifier from the steepest falls: planted lags and slew limits come back."""

from __future__ import annotations

import numpy as np
import pytest
from intake_files import G0_SIEMENS, recipe, record, volts
from scipy.signal import lfilter

from meseta import intake
from meseta.intake.response import rise_times, slew_limit
from meseta.traces import Quality


def lagged(steps, constant_samples):
    """Return steps behind a first-order lag: y += (x - y) (1 - exp(-1/tau)), the exact answer to held samples."""
    share = 1 - np.exp(-1 / constant_samples)
    return lfilter([share], [1, share - 1], steps - steps[0]) + steps[0]


@pytest.mark.parametrize("constant_samples", [2.0, 5.0, 20.0])
@pytest.mark.parametrize("scale", [1.0, 1e-3])
def test_a_first_order_lag_shows_its_rise_time(constant_samples, scale):
    """10 to 90 % of a first-order lag takes tau ln 9 = 2.197 tau, at every conductance alike."""
    rng = np.random.default_rng(1)
    rows = []
    for _ in range(40):
        plateau = int(rng.integers(50, 150))
        contact = np.concatenate([np.full(plateau, 1.0), np.full(400, 1e-6)])
        rows.append(scale * lagged(contact, constant_samples))
    times = rise_times(rows, highest_g0=scale, lowest_g0=1e-4 * scale)
    assert len(times.level_g0) >= 6
    np.testing.assert_allclose(times.rise_samples, np.log(9) * constant_samples, rtol=0.02)
    assert (times.falls == 40).all()


def test_an_amplifier_that_is_slower_at_small_currents_shows_it():
    """Two stages: 3 samples above 1 % of the contact, 15 below; slow contacts do not hide the amplifier."""
    rng = np.random.default_rng(2)
    rows = []
    for place in range(60):
        fast = np.exp(-np.arange(14) / 3.0)
        slow = fast[-1] * np.exp(-np.arange(1, 150) / 15.0)
        decay = 10 ** -(np.arange(600) * 0.006) if place % 3 == 0 else np.concatenate([fast, slow])
        rows.append(np.concatenate([np.full(int(rng.integers(20, 60)), 1.0), decay]))
    times = rise_times(rows, lowest_g0=1e-4)
    above, below = times.level_g0 > 0.03, times.level_g0 < 3e-3
    np.testing.assert_allclose(times.rise_samples[above], np.log(9) * 3, rtol=0.02)
    np.testing.assert_allclose(times.rise_samples[below], np.log(9) * 15, rtol=0.02)


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
