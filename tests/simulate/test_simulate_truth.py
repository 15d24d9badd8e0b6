"""Truth, determinism, and compiled kernels against plain numpy."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from meseta.errors import CallError
from meseta.simulate import KINDS, SimulationSettings, kernels, simulate, standard_workload
from meseta.simulate.pieces import Pieces
from meseta.work import Work

QUIET = SimulationSettings(
    samples=2500, noise="clean", floor_sigma_g0=1e-12, relative_noise=0.0, molecule_noise=0.0, tunnelling_noise=0.0,
    temperature_kelvin=1e-9, converter_step_g0=0.0, yield_share=0.7,
)  # fmt: skip


@pytest.mark.parametrize("kind", KINDS)
def test_same_seed_same_bits_whatever_the_threads_and_blocks(kind: str) -> None:
    chosen = SimulationSettings(samples=700)
    one = simulate(kind, 150, 21, chosen, Work(threads=1))
    other = simulate(kind, 150, 21, chosen, Work(threads=3, block_samples=1000))
    assert np.array_equal(one.traces.conductance, other.traces.conductance)
    assert one.traces.key == other.traces.key
    for name, column in one.truth.columns().items():
        assert np.array_equal(column, other.truth[name]), name


def test_a_longer_record_begins_with_the_shorter_one() -> None:
    chosen = SimulationSettings(samples=700, memory_traces=5.0)
    short, long = simulate("molecule", 70, 4, chosen), simulate("molecule", 200, 4, chosen)
    assert np.array_equal(short.traces.conductance, long.traces.conductance[: 70 * 700])


def test_other_seeds_and_other_kinds_share_no_noise() -> None:
    chosen = SimulationSettings(samples=2500)
    first = simulate("blank", 20, 4, chosen).traces.conductance.reshape(20, -1)[:, -500:]
    for other in (simulate("blank", 20, 5, chosen), simulate("molecule", 20, 4, chosen)):
        floor = other.traces.conductance.reshape(20, -1)[:, -500:]
        assert abs(np.corrcoef(first.ravel(), floor.ravel())[0, 1]) < 0.05


@pytest.mark.parametrize("kind", ["metal", "molecule", "mixture"])
@pytest.mark.parametrize("amplifier", ["linear", "logarithmic"])
def test_truth_holds_sample_by_sample_without_noise(kind: str, amplifier: str) -> None:
    made = simulate(kind, 60, 9, QUIET.with_values(amplifier=amplifier))
    values = made.traces.conductance.reshape(60, -1).astype(float)
    truth = made.truth
    assert len(truth) > 200
    for row in range(len(truth)):
        inside = values[truth.trace[row], truth.start[row] : truth.stop[row]]
        place = np.arange(len(inside)) - (len(inside) - 1) / 2
        line = 10 ** (truth.slope_decades_per_nm[row] * QUIET.nm_per_sample * place)
        line *= truth.level_g0[row] / line.mean()
        assert np.abs(inside / line - 1).max() < 0.08, row
        after = values[truth.trace[row], min(truth.stop[row] + 20, 2499)]
        assert after < truth.level_g0[row] * 1.02


@pytest.mark.parametrize("kind", ["metal", "molecule", "mixture", "blank"])
def test_true_ranges_are_in_order_and_apart(kind: str) -> None:
    truth = simulate(kind, 80, 3, SimulationSettings(noise="hard")).truth
    assert (truth.start >= 0).all()
    assert (truth.stop <= 5000).all()
    assert (truth.stop - truth.start >= 3).all()
    same = truth.trace[1:] == truth.trace[:-1]
    assert (truth.trace[1:] >= truth.trace[:-1]).all()
    assert (truth.start[1:][same] >= truth.stop[:-1][same]).all()
    assert (truth.level_g0[1:][same] < truth.level_g0[:-1][same] * 1.05).all()


def test_a_slow_amplifier_shortens_the_true_range_by_its_rise() -> None:
    fast = simulate("metal", 100, 9, QUIET.with_values(bandwidth_hertz=9000.0)).truth
    slow = simulate("metal", 100, 9, QUIET.with_values(bandwidth_hertz=600.0)).truth
    assert fast.start[fast.start > 0].min() > 0
    # the single-atom plateau of each trace begins later with the slower amplifier
    late = [slow.start[slow.trace == t][-1] - fast.start[fast.trace == t][-1] for t in range(100)]
    assert 5 < np.median(late) < 60


def test_a_series_resistor_lowers_the_readings_but_not_the_truth() -> None:
    free, held = (
        simulate("metal", 30, 2, QUIET),
        simulate("metal", 30, 2, QUIET.with_values(series_resistance_ohm=500.0)),
    )
    np.testing.assert_allclose(free.truth.level_g0[:50], held.truth.level_g0[:50], rtol=0.02)
    contact, shown = free.traces.conductance.astype(float), held.traces.conductance.astype(float)
    steady = np.abs(np.gradient(contact)) < 1e-4
    np.testing.assert_allclose(shown[steady], (contact / (1 + 0.03874045865 * contact))[steady], atol=2e-3)


def test_workload_has_its_shares_and_its_floor() -> None:
    made = standard_workload(200, 2000, 3)
    kinds, counts = np.unique(made.table["kind"], return_counts=True)
    assert dict(zip(kinds, counts, strict=True)) == {"metal": 80, "molecule": 80, "tunnelling": 40}
    assert (made.conductance < 4.5e-6).mean() == pytest.approx(0.6, abs=0.05)
    assert np.array_equal(made.conductance, standard_workload(200, 2000, 3).conductance)


def test_bad_calls_say_what_is_wrong() -> None:
    for call, word in (
        (lambda: simulate("metall", 3, 1), "metal"),
        (lambda: simulate("metal", 0, 1), "at least 1"),
        (lambda: simulate("metal", 3, -1), "negative"),
        (lambda: SimulationSettings(samples=3), "at least 50"),
        (lambda: SimulationSettings(noise="loud"), "clean"),
        (lambda: SimulationSettings().with_words(["sampels=3"]), "samples"),
        (lambda: SimulationSettings().with_words(["samples=3.5"]), "whole number"),
        (lambda: SimulationSettings().with_words(["samples"]), "name=value"),
        (lambda: SimulationSettings(bias_volt=float("nan")), "finite"),
    ):
        with pytest.raises(CallError, match=word):
            call()


def test_settings_from_words_and_their_description() -> None:
    chosen = SimulationSettings().with_words(["samples=300", "noise=hard", "pickup_g0=none", "bias_volt=0.2"])
    assert (chosen.samples, chosen.noise, chosen.pickup_g0, chosen.bias_volt) == (300, "hard", None, 0.2)
    for info in SimulationSettings.describe():
        assert info.title, info.name
        assert info.kind in ("integer", "number", "choice")


# -- kernels against plain numpy ---------------------------------------------------------------------------------------


def pieces_of(seed: int, traces: int = 4, pieces: int = 5, samples: int = 200) -> Pieces:
    rng = np.random.default_rng(seed)
    stop = np.sort(rng.integers(0, samples, (traces, pieces)), axis=1)
    stop[:, -1] = samples
    shape = (traces, pieces)
    own = rng.uniform(-5, 1, shape)
    own[rng.random(shape) < 0.2] = -np.inf
    return Pieces(
        stop.astype(np.int64), own, rng.normal(0, 1e-3, shape), rng.uniform(-8, -3, shape), rng.normal(0, 0.01, shape),
        rng.uniform(0, 0.1, shape), rng.integers(0, 3, shape).astype(np.uint8), np.zeros(shape, np.uint8),
    )  # fmt: skip


def drawn(pieces: Pieces, samples: int) -> np.ndarray:
    """Numpy twin of ``draw_ideal``."""
    out = np.zeros((len(pieces.stop), samples))
    for t in range(len(out)):
        begin = 0
        for p, end in enumerate(pieces.stop[t]):
            i = np.arange(max(end - begin, 0))
            own = 10.0 ** (pieces.log10_g0[t, p] + pieces.slope[t, p] * i)
            gap = 10.0 ** (pieces.tunnel_log10_g0[t, p] + pieces.tunnel_slope[t, p] * i)
            out[t, begin : begin + len(i)] = own + gap
            begin = max(begin, end)
    return out


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 10_000))
def test_pieces_are_drawn_as_numpy_draws_them(seed: int) -> None:
    pieces = pieces_of(seed)
    ideal = np.empty((4, 200))
    kernels.draw_ideal(pieces.stop, pieces.log10_g0, pieces.slope, pieces.tunnel_log10_g0, pieces.tunnel_slope, ideal)
    np.testing.assert_allclose(ideal, drawn(pieces, 200), rtol=1e-11)


def test_conductance_noise_is_put_on_as_numpy_puts_it() -> None:
    pieces, rng = pieces_of(3), np.random.default_rng(1)
    ideal, pink = rng.uniform(0.1, 1, (4, 200)), rng.standard_normal((4, 200)).astype(np.float32)
    size, switches = np.array([0.0, 0.1, 0.2, 0.05]), np.sort(rng.integers(0, 250, (4, 6)), axis=1).astype(np.int64)
    shaken = np.empty_like(ideal)
    kernels.shake(ideal, pink, pieces.stop, pieces.relative, pieces.kind, size, switches, shaken)
    for t in range(4):
        place = np.searchsorted(pieces.stop[t], np.arange(200), side="right")
        sign = np.where(np.searchsorted(switches[t], np.arange(200), side="right") % 2 == 0, 0.5, -0.5)
        factor = 1 + pieces.relative[t, place] * pink[t] + np.where(pieces.kind[t, place] > 0, sign * size[t], 0)
        np.testing.assert_allclose(shaken[t], ideal[t] * np.maximum(factor, 0.1), rtol=1e-12)


def test_memory_equals_scipys_filter() -> None:
    fresh, kept = np.random.default_rng(2).standard_normal(300), 0.8
    rest = np.sqrt(1 - kept**2)
    driven = np.concatenate([[fresh[0]], rest * fresh[1:]])
    np.testing.assert_allclose(kernels.remembered(fresh, kept), signal.lfilter([1], [1, -kept], driven), rtol=1e-12)


def test_quantising_equals_numpy() -> None:
    values = np.random.default_rng(3).normal(0, 0.02, (3, 100))
    out = np.empty(values.shape, np.float32)
    kernels.quantise_linear(values, 1e-4, 1e-3, 1e-2, 0.05, out)
    cut = np.clip(values, -0.05, 0.05)
    step = np.where(np.abs(cut) < 1e-2, 1e-4, 1e-3)
    np.testing.assert_array_equal(out, (np.rint(cut / step) * step).astype(np.float32))
    kernels.quantise_logarithmic(values, 0.01, 0.03, out)
    np.testing.assert_allclose(out, 10 ** (np.rint(np.minimum(values, 0.03) / 0.01) * 0.01), rtol=1e-6)


def test_true_ranges_of_a_case_done_by_hand() -> None:
    stop = np.array([[10, 20]], np.int64)
    level = np.log10(np.array([[2.0, 1.0]]))
    flat, kind = np.zeros((1, 2)), np.array([[1, 1]], np.uint8)
    ideal = np.concatenate([np.full(10, 2.0), np.full(10, 1.0)])[None]
    clean = ideal.copy()
    clean[0, :3] = [0.5, 1.5, 1.95]  # rises into the first plateau: inside 5 % from sample 2
    clean[0, 10:13] = [1.98, 1.4, 1.02]  # lags one sample behind, settles at sample 12
    first, last, mean = np.empty((1, 2), np.int64), np.empty((1, 2), np.int64), np.empty((1, 2))
    kernels.true_ranges(clean, ideal, stop, level, flat, kind, False, 0.0, 3, 0.05, first, last, mean)
    assert first.tolist() == [[2, 12]]
    assert last.tolist() == [[11, 20]]
    np.testing.assert_allclose(mean, [[2.0, 1.0]])
