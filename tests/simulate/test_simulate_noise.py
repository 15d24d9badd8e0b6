"""Noise and amplifier against scipy's filters and spectra."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import signal

from meseta.simulate import SimulationSettings, kernels, simulate
from meseta.simulate.readings import amplifier_of


def pink(samples: int, seed: int, sections: int = 7) -> np.ndarray:
    white = np.random.default_rng(seed).standard_normal(12_000 + samples, dtype=np.float32)
    out = np.empty(samples, np.float32)
    kernels.pink_noise(white, 12_000, *kernels.pink_filter(sections), out)
    return out.astype(float)


def test_conductance_noise_falls_as_one_over_f() -> None:
    frequency, power = signal.welch(pink(2_000_000, 1), nperseg=16384, detrend="linear")
    band = (frequency > 3e-4) & (frequency < 0.2)
    weights = 1 / np.sqrt(frequency[band])  # equal weight to each octave
    exponent = np.polyfit(np.log(frequency[band]), np.log(power[band]), 1, w=weights)[0]
    assert exponent == pytest.approx(-1.0, abs=0.05)


def test_conductance_noise_has_unit_variance() -> None:
    assert pink(4_000_000, 2).std() == pytest.approx(1.0, rel=0.05)


def test_pink_kernel_equals_scipys_filter() -> None:
    poles, zeros, gain = kernels.pink_filter(7)
    white = np.random.default_rng(3).standard_normal(5000, dtype=np.float32)
    out = np.empty(4000, np.float32)
    kernels.pink_noise(white, 1000, poles, zeros, gain, out)
    twin = signal.sosfilt(signal.zpk2sos(zeros, poles, gain), white.astype(float))[1000:]
    np.testing.assert_allclose(out, twin, atol=1e-5)


@pytest.mark.parametrize("poles", [1, 2])
@pytest.mark.parametrize("bandwidth", [1000.0, 5000.0])
def test_floor_noise_is_what_was_asked_for_whatever_the_filter(poles: int, bandwidth: float) -> None:
    settings = SimulationSettings(
        samples=3000, noise="clean", filter_poles=poles, bandwidth_hertz=bandwidth, floor_sigma_g0=2e-6,
        converter_step_g0=0.0,
    )  # fmt: skip
    floor = simulate("tunnelling", 300, 2, settings).traces.conductance.reshape(300, -1)[:, -1500:]
    assert floor.std() == pytest.approx(2e-6, rel=0.01)


@pytest.mark.parametrize("poles", [1, 2])
def test_amplifier_has_its_bandwidth_and_rise_time(poles: int) -> None:
    rate, corner = 1e6, 5000.0
    amplifier = amplifier_of(SimulationSettings(sampling_hertz=rate, bandwidth_hertz=corner, filter_poles=poles))
    step = np.zeros((1, 3000))
    step[0, 1:] = 1.0
    shown = np.empty_like(step)
    silent = np.zeros(step.shape, np.float32)
    kernels.amplify_linear(step, silent, 0.0, 0.0, 0.0, 0.0, 0.1, np.zeros(1), amplifier.coefficient, poles, shown)
    single = corner / (1.0 if poles == 1 else math.sqrt(math.sqrt(2) - 1))
    time, response = signal.step(
        ([1.0], np.poly([-2 * np.pi * single] * poles) / (2 * np.pi * single) ** poles), N=20001
    )
    analog = np.interp(0.9, response, time) - np.interp(0.1, response, time)
    rise = np.interp(0.9, shown[0], np.arange(3000)) - np.interp(0.1, shown[0], np.arange(3000))
    assert rise / rate == pytest.approx(analog, rel=0.01)
    assert amplifier.rise_samples == pytest.approx(rise, rel=0.01)
    impulse = np.diff(shown[0])
    frequency, gain = signal.freqz(impulse, worN=[2 * np.pi * corner / rate])
    assert abs(gain[0]) == pytest.approx(1 / math.sqrt(2), rel=0.03), frequency


def test_linear_amplifier_equals_scipys_filter() -> None:
    rng = np.random.default_rng(5)
    contact, white = rng.uniform(0, 2, (2, 400)), rng.standard_normal((2, 400), dtype=np.float32)
    shown, phase, mains, a = np.empty_like(contact), np.array([0.3, 2.0]), 0.05, 0.4
    kernels.amplify_linear(contact, white, 0.03, 0.01, 0.02, 0.1, mains, phase, a, 2, shown)
    measured = contact / (1 + 0.03 * contact)
    turns = phase[:, None] + mains * np.arange(400)
    noisy = measured + white * np.sqrt(0.01**2 + 0.02**2 * measured) + 0.1 * (np.sin(turns) + 0.3 * np.sin(3 * turns))
    first = measured[:, :1]
    twin = noisy
    for _ in range(2):
        twin = signal.lfilter([a], [1, a - 1], twin, zi=(1 - a) * first)[0]
    np.testing.assert_allclose(shown, twin, rtol=1e-9, atol=1e-12)


def test_logarithmic_amplifier_takes_the_size_of_the_current() -> None:
    contact, silent = np.full((1, 50), 1e-3), np.zeros((1, 50), np.float32)
    silent[0, 20] = -2.0
    shown = np.empty_like(contact)
    kernels.amplify_logarithmic(contact, silent, 0.0, 1e-3, 0.0, 0.0, 0.1, np.zeros(1), 1.0, 1, 1e-9, shown)
    np.testing.assert_allclose(shown, -3.0, atol=1e-12)  # 1e-3 - 2e-3 has the same size
    silent[0, 20] = -1.0
    kernels.amplify_logarithmic(contact, silent, 0.0, 1e-3, 0.0, 0.0, 0.1, np.zeros(1), 1.0, 1, 1e-9, shown)
    assert shown[0, 20] == pytest.approx(-9.0)


def test_mains_pickup_stands_at_its_frequency_with_its_size() -> None:
    settings = SimulationSettings(samples=4400, noise="clean", pickup_g0=1e-5, floor_sigma_g0=1e-6, mains_hertz=50.0)
    floor = simulate("tunnelling", 50, 3, settings).traces.conductance.reshape(50, -1)[:, 2400:4400].astype(float)
    turns = 2 * np.pi * 50.0 * np.arange(2000) / settings.sampling_hertz
    amplitude = 2 * np.abs((floor * np.exp(-1j * turns)).mean(axis=1))
    np.testing.assert_allclose(amplitude, 1e-5, rtol=0.05)
    third = 2 * np.abs((floor * np.exp(-3j * turns)).mean(axis=1))
    np.testing.assert_allclose(third, 3e-6, rtol=0.1)


def test_spikes_come_as_often_as_asked() -> None:
    settings = SimulationSettings(
        samples=4000, noise="clean", spikes_per_million=100.0, bandwidth_hertz=9000.0, floor_sigma_g0=1e-6
    )
    floor = simulate("tunnelling", 300, 3, settings).traces.conductance.reshape(300, -1)[:, 1500:].astype(float)
    far = np.abs(floor) > 8e-6
    spikes = (far[:, 1:] & ~far[:, :-1]).sum()
    expected = 100e-6 * floor.size
    assert abs(spikes - expected) < 4 * math.sqrt(expected)


def test_converter_steps_are_fine_below_the_hand_over_and_coarse_above() -> None:
    settings = SimulationSettings(samples=1000, converter_step_g0=5e-7)
    values = simulate("metal", 20, 3, settings).traces.conductance.astype(float)
    low, high = values[np.abs(values) < 5e-3], values[values > 0.02]
    assert np.abs(low / 5e-7 - np.round(low / 5e-7)).max() < 1e-2
    coarse = 2 * settings.full_scale_g0 / 2**settings.converter_bits
    assert np.abs(high / coarse - np.round(high / coarse)).max() < 2e-2
    assert len(np.unique(high)) > 50


def test_telegraph_noise_switches_between_two_values_on_the_plateau() -> None:
    base = SimulationSettings(samples=1500, noise="clean", relative_noise=0.0, staircase=1, telegraph_share=1.0)
    made = simulate("metal", 100, 3, base)
    values = made.traces.conductance.reshape(100, -1).astype(float)
    apart = []
    for trace, start, stop in zip(made.truth.trace, made.truth.start, made.truth.stop, strict=True):
        inside = values[trace, start + 5 : stop - 5]
        line = np.polyval(np.polyfit(np.arange(len(inside)), inside, 1), np.arange(len(inside)))
        apart.append(np.percentile(inside - line, 97) - np.percentile(inside - line, 3))
    assert np.median(apart) > 0.02
    still = simulate("metal", 100, 3, base.with_values(telegraph_share=0.0))
    quiet = still.traces.conductance.reshape(100, -1)[:, 5:20].astype(float)
    assert np.median(np.ptp(quiet, axis=1)) < 0.005
