"""Figures on band-limited waves against closed forms: sums of squares, of amplitudes."""

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from dsp.measure import measure
from dsp.waveform import Channel, Kind, Waveform
from dsp.windowing import Windower


def _readings(samples, rate, nominal, **channel):
    windower = Windower(1, 0, nominal)
    runs = windower.feed(Waveform(samples[None, :].copy(), rate, 0)) + windower.flush()
    return measure(runs[0], [Channel("x", "V", Kind.VOLTAGE, **channel)], nominal)


@st.composite
def waves(draw):
    """A fundamental and harmonics below 0.4 of the rate, amplitudes at most 0.5/order."""
    rate = draw(st.sampled_from((4000.0, 6400.0, 8000.0, 12800.0)))
    nominal = draw(st.sampled_from((50.0, 60.0)))
    hertz = nominal + draw(st.floats(-0.9, 0.9))
    seed = draw(st.integers(0, 2**31))
    rng = np.random.default_rng(seed)
    orders = np.arange(1, min(50, int(0.4 * rate / hertz)) + 1)
    amplitudes = np.where(orders == 1, 1.0, rng.uniform(0.0, 0.5, len(orders)) / orders)
    phases = rng.uniform(0.0, 2.0 * np.pi, len(orders))
    t = np.arange(int(1.2 * rate)) / rate
    samples = np.zeros(len(t))
    for order, amplitude, phase in zip(orders, amplitudes, phases, strict=True):
        samples += amplitude * np.sin(2.0 * np.pi * hertz * order * t + phase)
    return rate, nominal, hertz, amplitudes, phases, samples


@settings(deadline=None, max_examples=40)
@given(waves())
def test_float_samples(wave):
    rate, nominal, hertz, amplitudes, _, samples = wave
    readings = _readings(samples, rate, nominal)
    rms = np.sqrt(np.sum(amplitudes**2) / 2.0)  # closed form: orthogonal over whole cycles
    thd = np.sqrt(np.sum(amplitudes[1:] ** 2))
    assert readings.rms[:, 0] == pytest.approx(rms, rel=1e-6)
    assert readings.thd_f[:, 0] == pytest.approx(thd, abs=1e-4)  # 0.01 percentage points
    assert readings.frequency == pytest.approx(hertz, abs=1e-4)
    assert readings.fundamental[:, 0] == pytest.approx(np.sqrt(0.5), rel=1e-5)
    got = np.abs(readings.harmonics[2, 0, : len(amplitudes)]) * np.sqrt(2.0)
    # What the ends let through of harmonics near 0.4 of the rate: below 0.1 % of the fundamental.
    assert got == pytest.approx(amplitudes, abs=1e-3)


@settings(deadline=None, max_examples=25)
@given(waves(), st.sampled_from((10, 12)))
def test_coded_samples(wave, bits):
    rate, nominal, hertz, amplitudes, _, samples = wave
    # A wave in step with the samples repeats its rounding errors in every cycle: see below.
    assume(abs(hertz - nominal) > 0.02)
    step = 2.4 * float(np.max(np.abs(samples))) / 2**bits
    readings = _readings(np.round(samples / step) * step, rate, nominal, step=step)
    rms = np.sqrt(np.sum(amplitudes**2) / 2.0)
    limit = {10: 200e-6, 12: 60e-6}[bits]
    assert readings.rms[:, 0] == pytest.approx(rms, rel=limit)


def test_rounding_errors_that_repeat_are_owned_up_to():
    """50 Hz at 8 kS/s: the same 160 samples ten times over; 95 % lie within two uncertainties."""
    rng = np.random.default_rng(5)
    off = []
    t = np.arange(8000) / 8000.0
    for _ in range(300):
        wave = np.sin(2.0 * np.pi * 50.0 * t + rng.uniform(0.0, 6.28))
        wave += 0.2 * np.sin(2.0 * np.pi * 150.0 * t + rng.uniform(0.0, 6.28))
        step = rng.uniform(2.0, 3.0) / 2**10
        readings = _readings(np.round(wave / step) * step, 8000.0, 50.0, step=step)
        off.append((readings.rms[0, 0] - np.sqrt(0.52)) / readings.u["rms"][0, 0])
    assert np.mean(np.abs(off) <= 2.0) >= 0.912  # as in test_the_interval_covers_the_truth


@settings(deadline=None, max_examples=40)
@given(st.floats(45.0, 65.0), st.floats(0.0, 6.28), st.sampled_from((4000.0, 8000.0, 10000.0)))
def test_mean_rectified_value_of_a_sine(hertz, phase, rate):
    t = np.arange(int(rate)) / rate
    readings = _readings(np.sin(2.0 * np.pi * hertz * t + phase), rate, None)
    assert readings.arv[:, 0] == pytest.approx(2.0 / np.pi, rel=20e-6)
    assert np.all(np.abs(readings.averaging_error) < 25e-6)


def test_phasors_against_a_plain_sum():
    """Against the definition: numpy's own sum over ten whole cycles of whole samples each."""
    rate, n = 8000.0, 1600
    rng = np.random.default_rng(4)
    t = np.arange(3 * n + 64)
    orders = np.arange(1, 41)
    phases = rng.uniform(0, 6.28, 40)
    amplitudes = np.where(orders == 1, 1.0, 0.1)
    samples = sum(
        a * np.cos(2 * np.pi * k * t / 160.0 + p)
        for a, k, p in zip(amplitudes, orders, phases, strict=True)
    )
    windower = Windower(1, 0, 50.0)
    run = (windower.feed(Waveform(samples[None, :], rate, 0)) + windower.flush())[0]
    readings = measure(run, [Channel("x", "V")], 50.0)
    begin = run.begins[0]
    for k in orders:
        spectrum = np.sum(samples[:n] * np.exp(-2j * np.pi * k * np.arange(n) / 160.0)) / n
        turned = spectrum * np.sqrt(2.0) * np.exp(2j * np.pi * k * begin / 160.0)
        assert readings.harmonics[0, 0, k - 1] == pytest.approx(turned, abs=2e-5)


def test_frequency_has_no_bias_and_scatters_near_the_bound():
    """Rife and Boorstyn's bound (from memory, not read): sd f = fs/(2 pi) sqrt(12/(eta N(N^2-1))).

    Windows of 0.2 s at 5 kS/s; points of the taper reach 1.5 cycles beyond a window, and 1.5 times
    the bound is the goal.
    """
    rate, hertz, seconds = 5000.0, 50.03, 160.0
    rng = np.random.default_rng(11)
    t = np.arange(int(rate * seconds)) / rate
    clean = np.sin(2.0 * np.pi * hertz * t)
    for decibel in (40.0, 60.0):
        eta = 10.0 ** (decibel / 10.0)
        noise = np.sqrt(0.5 / eta) * rng.standard_normal(len(t))
        frequency = _readings(clean + noise, rate, None).frequency
        n = 1000.0
        bound = rate / (2.0 * np.pi) * np.sqrt(12.0 / (eta * n * (n * n - 1.0)))
        count = len(frequency)
        assert count > 700
        spread = float(np.std(frequency))
        # 800 windows tell a standard deviation to 2.5 %; three of those on top.
        assert spread < 1.5 * bound * 1.08
        assert abs(float(np.mean(frequency)) - hertz) < 1e-4 + 3.0 * spread / np.sqrt(count)


def test_the_interval_covers_the_truth():
    """In at least 95 % of a randomised set, |value - truth| <= 2 u, for RMS and the error.

    Truths are closed forms; noise, quantisation and an offset are drawn as the channel states
    them. Three standard deviations of a count of 300 around 95 % are 3.8 points.
    """
    rng = np.random.default_rng(77)
    inside_rms = inside_error = total = 0
    for _ in range(300):
        rate = float(rng.choice((4000.0, 8000.0)))
        hertz = 50.0 + rng.uniform(-0.3, 0.3)
        orders = np.array([1, 3, 5, 7])
        amplitudes = np.array([1.0, *rng.uniform(0.0, 0.3, 3)])
        phases = rng.uniform(0.0, 6.28, 4)
        t = np.arange(int(0.55 * rate)) / rate
        fine = np.arange(20000) / 20000.0
        clean = sum(
            a * np.sin(2 * np.pi * hertz * k * t + p)
            for a, k, p in zip(amplitudes, orders, phases, strict=True)
        )
        cycle = sum(
            a * np.sin(2 * np.pi * k * fine + p)
            for a, k, p in zip(amplitudes, orders, phases, strict=True)
        )
        rms = float(np.sqrt(np.sum(amplitudes**2) / 2.0))
        error = np.pi / (2 * np.sqrt(2)) * float(np.mean(np.abs(cycle))) / rms - 1.0
        step = 2.0 * 1.6 / 2 ** int(rng.choice((10, 12)))
        gain = 1.0 + 0.002 * rng.standard_normal()
        offset = 0.002 * rng.standard_normal()
        noisy = gain * (clean + 0.5 * step * rng.standard_normal(len(t))) + offset
        coded = np.round(noisy / step) * step
        readings = _readings(coded, rate, 50.0, step=step, u_gain=0.002, u_offset=0.002)
        total += 1
        inside_rms += abs(readings.rms[0, 0] - rms) <= 2.0 * readings.u["rms"][0, 0]
        off = abs(readings.averaging_error[0, 0] - error)
        inside_error += off <= 2.0 * readings.u["averaging_error"][0, 0]
    assert inside_rms / total >= 0.912
    assert inside_error / total >= 0.912
