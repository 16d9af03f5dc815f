"""Figures against scipy: its sine fit, its quadrature, its resampling, on the same samples."""

import numpy as np
import pytest
from scipy import integrate, optimize, signal

from dsp.measure import measure
from dsp.waveform import Channel, Kind, Waveform
from dsp.windowing import Windower

RATE = 6400.0
ORDERS = np.arange(1, 14)
rng = np.random.default_rng(31)
AMPLITUDES = np.where(ORDERS == 1, 1.0, rng.uniform(0.0, 0.3, 13) / np.sqrt(ORDERS))
PHASES = rng.uniform(0.0, 2.0 * np.pi, 13)
HERTZ = 49.83


def value(t):
    """The wave at times t."""
    angle = 2.0 * np.pi * HERTZ * np.multiply.outer(np.asarray(t, float), ORDERS) + PHASES
    return 0.07 + (AMPLITUDES * np.sin(angle)).sum(-1)


@pytest.fixture(scope="module")
def found():
    noise = 1e-4 * np.random.default_rng(4).standard_normal(int(RATE))
    samples = value(np.arange(int(RATE)) / RATE) + noise
    windower = Windower(1)
    runs = windower.feed(Waveform(samples[None, :], RATE, 0)) + windower.flush()
    return runs[0], measure(runs[0], [Channel("x", "V", Kind.VOLTAGE)])


def test_levels_by_quadrature(found):
    # scipy's quad over one cycle of the continuous wave.
    _, readings = found
    cycle, options = 1.0 / HERTZ, {"limit": 400, "epsabs": 1e-9}
    square = integrate.quad(lambda t: value(t) ** 2, 0.0, cycle, **options)[0] / cycle
    arv = integrate.quad(lambda t: abs(value(t)), 0.0, cycle, **options)[0] / cycle
    ac = integrate.quad(lambda t: abs(value(t) - 0.07), 0.0, cycle, **options)[0] / cycle
    assert readings.rms[:, 0] == pytest.approx(np.sqrt(square), rel=5e-6)
    assert readings.mean[:, 0] == pytest.approx(0.07, abs=2e-5)
    # Crossings between 128 samples a cycle of a wave with a 13th harmonic: a few 1e-5.
    assert readings.arv[:, 0] == pytest.approx(arv, rel=1e-4)
    assert readings.averaging[:, 0] == pytest.approx(np.pi / 8**0.5 * ac, rel=1e-4)


def test_frequency_and_harmonics_by_least_squares(found):
    # A sine fit of all orders at once with scipy's least_squares, over each window's samples.
    run, readings = found
    for w in (0, 2):
        low, high = int(run.begins[w]) - run.first, int(run.ends[w]) - run.first
        y, t = run.samples[0, low:high], np.arange(high - low) / RATE

        def design(hertz, t=t):
            angle = 2.0 * np.pi * hertz * np.multiply.outer(t, ORDERS)
            return np.hstack((np.ones((len(t), 1)), np.cos(angle), np.sin(angle)))

        def misfit(p, y=y):
            a = design(p[0])
            return y - a @ np.linalg.lstsq(a, y)[0]

        hertz = optimize.least_squares(misfit, [50.0], x_scale=1e-3, xtol=1e-15, ftol=1e-15).x[0]
        factors = np.linalg.lstsq(design(hertz), y)[0]
        sizes = np.hypot(factors[1:14], factors[14:]) / np.sqrt(2.0)
        assert readings.frequency[w] == pytest.approx(hertz, abs=2e-4)  # noise of 80 dB
        assert np.abs(readings.harmonics[w, 0, :13]) == pytest.approx(sizes, abs=2e-5)
        thd = np.sqrt(np.sum(sizes[1:] ** 2)) / sizes[0]
        assert readings.thd_f[w, 0] == pytest.approx(thd, abs=2e-5)


def test_rms_after_resampling_to_whole_samples(found):
    # scipy's polyphase filter takes the wave to 25 times the rate; there a window's ends are whole
    # samples to 1/250 of a cycle's hundredth, and a plain mean of squares will do.
    run, readings = found
    fine = signal.resample_poly(run.samples[0], 25, 1, window=("kaiser", 12.0))
    for w in (1, 2):
        low = round(25 * (run.begins[w] - run.first))
        high = round(25 * (run.ends[w] - run.first))
        rms = np.sqrt(np.mean(fine[low:high] ** 2))
        assert readings.rms[w, 0] == pytest.approx(rms, rel=3e-5)
