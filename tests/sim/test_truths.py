"""The simulator's closed forms against quadrature by mpmath, and its samples against both."""

import math

import mpmath
import numpy as np
import pytest

from sim import truths, waveforms
from sim.scenes import SCENES, find

ANGLES = [0, 12, 25, 40, 55, 60, 70, 83, 90, 104, 120, 131, 148, 165, 178]


def _cut(t, angle):
    return mpmath.sin(t) if t >= angle else mpmath.mpf(0)


@pytest.mark.parametrize("degrees", ANGLES)
def test_phase_cut_levels_by_quadrature(degrees):
    a = mpmath.radians(degrees)
    square = mpmath.quad(lambda t: mpmath.sin(t) ** 2, [a, mpmath.pi]) / mpmath.pi
    mean = mpmath.quad(mpmath.sin, [a, mpmath.pi]) / mpmath.pi
    sine = mpmath.quad(lambda t: mpmath.sin(t) * mpmath.sin(t), [a, mpmath.pi]) * 2 / mpmath.pi
    cosine = mpmath.quad(lambda t: mpmath.sin(t) * mpmath.cos(t), [a, mpmath.pi]) * 2 / mpmath.pi
    truth = truths.phase_cut(1.0 / math.sqrt(2.0), math.radians(degrees))  # unit peak
    assert truth.rms == pytest.approx(float(mpmath.sqrt(square)), rel=1e-9, abs=1e-9)
    assert truth.arv == pytest.approx(float(mean), rel=1e-9, abs=1e-9)
    first_square = (sine**2 + cosine**2) / 2
    thd = mpmath.sqrt(max(0, square / first_square - 1))
    assert truth.thd_f == pytest.approx(float(thd), rel=1e-6, abs=1e-6)


@pytest.mark.parametrize("degrees", [15, 30, 45, 62, 90, 120])
def test_charging_pulses_by_quadrature(degrees):
    w = math.radians(degrees)
    pulse = lambda t: mpmath.cos(mpmath.pi * t / w)  # noqa: E731 - the integrand, as it is written
    square = mpmath.quad(lambda t: pulse(t) ** 2, [-w / 2, w / 2]) / mpmath.pi
    mean = mpmath.quad(pulse, [-w / 2, w / 2]) / mpmath.pi
    truth = truths.charging_pulses(3.0, w)
    assert truth.rms == pytest.approx(3.0 * float(mpmath.sqrt(square)), rel=1e-9)
    assert truth.arv == pytest.approx(3.0 * float(mean), rel=1e-9)


@pytest.mark.parametrize("degrees", ANGLES)
def test_neutral_of_three_equal_phases_by_summing_them(degrees):
    """Against a plain sum of three cut sines, 120 degrees apart, 360,000 points a cycle."""
    phase = 2.0 * np.pi * (np.arange(360_000) + 0.5) / 360_000
    total = sum(
        waveforms.leading_cut(phase + shift, math.radians(degrees))
        for shift in (0.0, 2.0 * np.pi / 3.0, -2.0 * np.pi / 3.0)
    )
    rms = math.sqrt(2.0) * float(np.sqrt(np.mean(total**2)))
    found = truths.neutral_of_three(1.0, math.radians(degrees))
    assert found == pytest.approx(rms, abs=2e-5)


# The neutral in full-load amperes at these angles: closed form, worked to five places apart.
NEUTRAL = [(15, 0.10615), (30, 0.29411), (45, 0.52205), (75, 0.94298), (90, 1.0), (120, 0.76584)]


@pytest.mark.parametrize(("degrees", "amperes"), NEUTRAL)
def test_neutral_figures(degrees, amperes):
    assert truths.neutral_of_three(1.0, math.radians(degrees)) == pytest.approx(amperes, abs=6e-6)


# wave, its truth: sampled at a million points a cycle; 2e-6 is two points astray at an edge.
SHAPES = [
    (waveforms.sine, truths.sine(math.sqrt(0.5))),
    (waveforms.square, truths.square(1.0)),
    (waveforms.triangle, truths.triangle(1.0)),
    (waveforms.six_pulse, truths.six_pulse(1.0)),
]


@pytest.mark.parametrize(("wave", "truth"), SHAPES)
def test_shapes_have_their_truth(wave, truth):
    x = wave(2.0 * np.pi * (np.arange(1_000_000) + 0.5) / 1_000_000)
    assert float(np.sqrt(np.mean(x**2))) == pytest.approx(truth.rms, abs=2e-6)
    assert float(np.mean(np.abs(x))) == pytest.approx(truth.arv, abs=2e-6)
    assert float(np.max(np.abs(x))) == pytest.approx(truth.peak, abs=2e-6)
    spectrum = np.abs(np.fft.rfft(x)) * 2.0 / len(x)
    distortion = math.sqrt(max(0.0, float(np.mean(x**2)) * 2.0 / spectrum[1] ** 2 - 1.0))
    assert distortion == pytest.approx(truth.thd_f, abs=1e-5)


def test_ratios_of_the_trade():
    """0.637 and 0.707 of the peak, 120 V is 170 V peak: common practice, no source."""
    truth = truths.sine(120.0)
    assert truth.peak == pytest.approx(170.0, abs=0.5)
    assert truth.arv / truth.peak == pytest.approx(0.637, abs=5e-4)
    assert truth.rms / truth.peak == pytest.approx(0.707, abs=5e-4)
    assert truth.averaging == pytest.approx(120.0, rel=1e-12)


def test_pairs_of_the_trade():
    """49/24, 75/47, 115/103 V on a cut 121.9 V supply: common practice, no source; within 3 V."""
    for degrees, true, meter in ((124.258, 49, 24), (101.068, 75, 47), (48.263, 115, 103)):
        truth = truths.phase_cut(121.9, math.radians(degrees))
        assert truth.rms == pytest.approx(true, abs=0.01)
        assert truth.averaging == pytest.approx(meter, abs=3.0)
        assert truth.averaging < truth.rms


@pytest.mark.parametrize("name", SCENES)
def test_a_scene_flows_as_its_truth_says(name):
    """Plain means over twenty cycles, 40,000 points each, at times when nothing changes."""
    scene = find(name)
    hertz = scene.frequency
    checked = 0
    for start in (1.0, 15.0, 25.0, 40.0, 70.0):
        t = start + np.arange(800_000) / 800_000 * (20.0 / hertz)
        values = scene.at(t)
        assert values.shape == (len(scene.channels), len(t))
        middle, end = scene.truth(start + 10.0 / hertz), scene.truth(float(t[-1]))
        for k, (row, truth) in enumerate(zip(values, middle, strict=True)):
            begin = scene.truth(start)[k]
            if truth is None or begin is None or end[k] is None:
                continue
            # What swings meanwhile (the pump's stroke) is bounded by its ends.
            slack = abs(begin.rms - end[k].rms) + 2e-4 * truth.rms + 1e-9
            assert float(np.sqrt(np.mean(row**2))) == pytest.approx(truth.rms, abs=slack)
            assert float(np.max(np.abs(row))) <= scene.channels[k].full_scale
            checked += 1
    assert checked >= 6
