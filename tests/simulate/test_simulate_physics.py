"""Simulated junctions against published values, textbook laws and the parameters they were asked to have."""

from __future__ import annotations

import math

import numpy as np
import pytest

from meseta.quantities import barrier_from_decay
from meseta.simulate import SimulationSettings, simulate

METAL = simulate("metal", 1500, 11, SimulationSettings(samples=2600))


def readings(simulation) -> np.ndarray:
    return simulation.traces.conductance.reshape(simulation.traces.traces, -1).astype(float)


def test_histogram_peaks_stand_where_gold_has_them() -> None:
    # Gai et al., PRB 53, 1042 (1996): room-temperature gold has peaks at integer multiples of G0 only (tolerance 0.15);
    # Yanson et al., Nature 395, 783 (1998): the last plateau is close to 1 G0 (tolerance 0.1).
    values = readings(METAL)
    counts, edges = np.histogram(values, np.arange(0.0, 4.5, 0.02))
    centres = (edges[1:] + edges[:-1]) / 2
    for number, tolerance in ((1, 0.1), (2, 0.15), (3, 0.15)):
        near = np.abs(centres - number) < 0.45
        assert abs(centres[near][np.argmax(counts[near])] - number) < tolerance
        valley = counts[np.abs(centres - (number - 0.45)) < 0.05].mean()
        assert counts[near].max() > 3 * valley


def test_scattering_shifts_the_peaks_as_a_series_resistance_does() -> None:
    # 400 ohm in series: 1, 2, 3 G0 become 0.9699, 1.8833, 2.7448 G0 (computed from 1/G_m = 1/G_c + R with CODATA G0).
    from meseta.simulate.junctions import metal_centre_g0

    centres = metal_centre_g0([1, 2, 3], SimulationSettings(scattering_ohm=400.0))
    np.testing.assert_allclose(centres, [0.9699392858, 1.883266243, 2.744796756], rtol=1e-9)


def test_single_atom_levels_have_the_population_they_claim() -> None:
    peak = METAL.parameters["peaks"][0]
    last = np.array([METAL.truth.level_g0[METAL.truth.trace == trace][-1] for trace in range(METAL.traces.traces)])
    single = last[np.abs(last - 1) < 0.4]
    error = peak["sigma_g0"] / math.sqrt(len(single))
    assert abs(single.mean() - peak["position_g0"]) < 4 * error
    assert single.std() == pytest.approx(peak["sigma_g0"], rel=0.08)


def test_last_plateaus_favour_multiples_of_the_atomic_distance() -> None:
    # Untiedt et al., cond-mat/0202349: length peaks of gold chains are 0.26 +- 0.02 nm apart (0.25 recalled).
    values, step = readings(METAL), METAL.parameters["nm_per_sample"]
    lengths = ((values > 0.6) & (values < 1.3)).sum(axis=1) * step
    phases = [
        np.abs(np.exp(2j * np.pi * lengths[lengths > 0.1] / period).sum()) for period in np.arange(0.15, 0.4, 0.005)
    ]
    period = np.arange(0.15, 0.4, 0.005)[int(np.argmax(phases))]
    assert abs(period - 0.26) <= 0.02


def test_tunnelling_falls_one_decade_in_a_tenth_of_a_nanometre() -> None:
    settings = SimulationSettings(samples=1500, noise="clean")
    made = simulate("tunnelling", 300, 4, settings)
    values, axis = readings(made), np.arange(1500) * settings.nm_per_sample
    slopes = []
    for trace in values:
        use = (trace < 1e-1) & (trace > 1e-4) & (np.arange(1500) < 700)
        slopes.append(np.polyfit(axis[use], np.log10(trace[use]), 1)[0])
    assert np.median(slopes) == pytest.approx(-10.0, abs=0.15)
    assert np.std(slopes) == pytest.approx(10.0 * settings.tunnelling_spread, rel=0.15)
    # A square barrier of 5.05 eV gives one decade a tenth of a nanometre: phi/eV = 5.050034239 (decades/angstrom)^2.
    assert barrier_from_decay(np.median(slopes)) == pytest.approx(5.05, rel=0.03)
    assert len(made.truth) == 0


def test_molecular_plateaus_are_log_normal_with_the_yield_asked_for() -> None:
    settings = SimulationSettings(yield_share=0.3, samples=3500, noise="clean")
    made = simulate("molecule", 1500, 5, settings)
    share = (made.labels == "molecule").mean()
    assert abs(share - 0.3) < 3.5 * math.sqrt(0.3 * 0.7 / 1500)
    levels = np.log10(made.truth.level_g0[made.truth.kind == "molecule"])
    error = settings.molecule_width_decades / math.sqrt(len(levels))
    assert abs(levels.mean() - settings.molecule_log10_g0) < 4 * error
    assert levels.std() == pytest.approx(settings.molecule_width_decades, rel=0.1)
    # widths of molecular peaks are 0.3 to 0.6 decade FWHM: common practice, no source
    assert 0.3 < 2.3548 * levels.std() < 0.6


def test_a_mixture_is_labelled_and_its_kinds_differ() -> None:
    made = simulate("mixture", 600, 6, SimulationSettings(yield_share=0.8, second_share=0.25))
    rows = made.truth.kind == "molecule"
    levels, labels = np.log10(made.truth.level_g0[rows]), made.truth.label[rows]
    assert np.median(levels[labels == "first"]) == pytest.approx(math.log10(2e-4), abs=0.06)
    assert np.median(levels[labels == "second"]) == pytest.approx(-4.7, abs=0.08)
    bridged = made.labels != "none"
    assert abs((made.labels[bridged] == "second").mean() - 0.25) < 3.5 * math.sqrt(0.25 * 0.75 / bridged.sum())
    assert set(made.truth.label[~rows]) == {""}


def test_a_blank_has_no_molecule() -> None:
    made = simulate("blank", 100, 7)
    assert set(made.truth.kind) == {"metal"}
    assert set(made.labels) == {"none"}


def test_memory_drift_and_specimens_do_what_they_say() -> None:
    base = SimulationSettings(yield_share=1.0, noise="clean", samples=3000)

    def levels(**values) -> np.ndarray:
        made = simulate("molecule", 1200, 8, base.with_values(**values))
        rows = made.truth.kind == "molecule"
        by_trace = np.full(1200, np.nan)
        by_trace[made.truth.trace[rows]] = np.log10(made.truth.level_g0[rows])
        return by_trace

    def correlation(values: np.ndarray, lag: int) -> float:
        both = np.isfinite(values[lag:]) & np.isfinite(values[:-lag])
        return float(np.corrcoef(values[lag:][both], values[:-lag][both])[0, 1])

    independent, remembered = levels(), levels(memory_traces=20.0, memory_share=0.6)
    assert abs(correlation(independent, 1)) < 4 / math.sqrt(1200)
    assert correlation(remembered, 1) == pytest.approx(0.6 * math.exp(-1 / 20), abs=0.15)
    assert np.nanstd(remembered) == pytest.approx(base.molecule_width_decades, rel=0.25)
    drifting = levels(drift_decades=0.5)
    slope = np.polyfit(np.flatnonzero(np.isfinite(drifting)), drifting[np.isfinite(drifting)], 1)[0] * 1200
    assert slope == pytest.approx(0.5, abs=0.08)
    apart = levels(specimens=4, specimen_decades=0.6).reshape(4, 300)
    assert np.nanmean(apart, axis=1).std() > 0.15


def test_thermal_noise_is_that_of_johnson_and_nyquist() -> None:
    # sqrt(4 k_B T G B) for 1 G0, 300 K, 10 kHz at 100 mV: 1.462294638e-5 G0 (computed from CODATA constants).
    from meseta.simulate.readings import amplifier_of

    assert amplifier_of(SimulationSettings(sampling_hertz=20_000.0)).thermal == pytest.approx(1.462294638e-5, rel=1e-9)
