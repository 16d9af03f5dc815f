"""Levels of waves whose integrals are known: every row a closed form, worked by hand.

Waves with edges are sampled 400 times a cycle at a rate that keeps no step with them, so that an
edge falls anywhere between two samples; 2e-3 of tolerance is one sample of 400 astray at an edge.
"""

import numpy as np
import pytest

from sim import waveforms

RATE, HERTZ = 20000.0, 49.87
SMOOTH, EDGED = 2e-5, 2.5e-3

PI = np.pi
K = PI / (2.0 * np.sqrt(2.0))  # form factor of a sine


def _pulses(phase, duty):
    """Bipolar rectangular pulses, `duty` of each half-cycle."""
    within = np.mod(phase, PI)
    return np.where(within < duty * PI, waveforms.square(phase), 0.0)


# wave, rms, arv, crest factor, averaging error (AC-coupled), tolerance; all closed forms
WAVES = {
    "sine": (waveforms.sine, 0.70710678, 0.63661977, 1.41421356, 0.0, SMOOTH),
    "square": (waveforms.square, 1.0, 1.0, 1.0, 0.11072073, EDGED),
    "triangle": (waveforms.triangle, 0.57735027, 0.5, 1.73205081, -0.03808763, SMOOTH * 3),
    "full-wave rectified": (waveforms.full_wave, 0.70710678, 0.63661977, 1.41421356, None, SMOOTH),
    "half-wave rectified": (waveforms.half_wave, 0.5, 0.31830989, 2.0, None, SMOOTH * 3),
    "six-pulse blocks": (waveforms.six_pulse, 0.81649658, 0.66666667, 1.22474487, -0.0931, EDGED),
    "pulses, a quarter": (lambda p: _pulses(p, 0.25), 0.5, 0.25, 2.0, -0.44464, 2 * EDGED),
    "pulses, a tenth": (
        lambda p: _pulses(p, 0.1), 0.31622777, 0.1, 3.16227766, -0.64876, 3 * EDGED,
    ),
    "charging pulses, 90 degrees": (
        lambda p: waveforms.charging_pulses(p, PI / 2), 0.5, 0.31830989, 2.0, -0.29289, 1e-4,
    ),
    "charging pulses, 60 degrees": (
        lambda p: waveforms.charging_pulses(p, PI / 3), 0.40824829, 0.21220659, 2.44948974,
        -0.42265, 2e-4,
    ),
    "charging pulses, 30 degrees": (
        lambda p: waveforms.charging_pulses(p, PI / 6), 0.28867513, 0.10610330, 3.46410162,
        -0.59175, 1e-3,
    ),
}  # fmt: skip


def _phase(seconds: float = 1.0) -> np.ndarray:
    return 2.0 * PI * HERTZ * np.arange(int(RATE * seconds)) / RATE + 0.7


@pytest.mark.parametrize("name", WAVES)
def test_levels(readings_of, name):
    wave, rms, arv, crest, error, tolerance = WAVES[name]
    # A pure sine beside it is the reference, as a supply would be.
    phase = _phase()
    readings = readings_of(np.stack((np.sin(phase), 3.0 * wave(phase))), RATE)[0]
    assert readings.rms[1:, 1] == pytest.approx(3.0 * rms, rel=tolerance)
    assert readings.arv[1:, 1] == pytest.approx(3.0 * arv, rel=2 * tolerance)
    # A pointed top is missed by up to half a sample: 4 * 0.5 / 401 of it.
    pointed = 0.005 if name == "triangle" else 2e-4
    assert readings.crest_factor[1:, 1] == pytest.approx(crest, rel=max(2 * tolerance, pointed))
    assert readings.form_factor[1:, 1] == pytest.approx(rms / arv, rel=3 * tolerance)
    if error is not None:
        assert readings.averaging_error[1:, 1] == pytest.approx(error, abs=3 * tolerance)


# DC-coupled figures keep the mean; AC-coupled ones are of x - mean: closed forms
#   full-wave: mean 2/pi, AC rms sqrt(1/2 - 4/pi^2), AC arv worked out as 0.2680343
#   half-wave: mean 1/pi, AC rms sqrt(1/4 - 1/pi^2), AC arv 0.3508424
RECTIFIED = {
    "full-wave": (waveforms.full_wave, 0.63661977, 0.2680343),
    "half-wave": (waveforms.half_wave, 0.31830989, 0.3508424),
}


@pytest.mark.parametrize("name", RECTIFIED)
def test_an_ac_coupled_meter_does_not_see_the_mean(readings_of, name):
    wave, mean, arv_ac = RECTIFIED[name]
    phase = _phase()
    readings = readings_of(np.stack((np.sin(phase), wave(phase))), RATE)[0]
    assert readings.mean[1:, 1] == pytest.approx(mean, rel=1e-4)
    assert readings.averaging[1:, 1] == pytest.approx(K * arv_ac, rel=5e-4)


# Phase-cut sine, leading edge, closed form: angle, r = rms/V0, averaging/true, THD-F.
CUTS = [
    (15, 0.99812, 0.98481, 0.05754),
    (30, 0.98548, 0.94676, 0.15107),
    (45, 0.95350, 0.89518, 0.25926),
    (60, 0.89694, 0.83618, 0.37737),
    (75, 0.81419, 0.77305, 0.50630),
    (90, 0.70711, 0.70711, 0.65054),
    (105, 0.58059, 0.63830, 0.81863),
    (120, 0.44216, 0.56541, 1.02630),
    (135, 0.30140, 0.48588, 1.30579),
    (150, 0.16981, 0.39449, 1.73923),
    (165, 0.06129, 0.27800, 2.64807),
]


def _slope(degrees: float) -> float:
    """d ln(rms) per radian of firing angle (closed form): what one sample astray costs."""
    a = np.radians(degrees)
    r2 = 1.0 - a / PI + np.sin(2 * a) / (2 * PI)
    return float(np.sin(a) ** 2 / PI / r2)


@pytest.mark.parametrize("edge", ["leading", "trailing"])
@pytest.mark.parametrize(("degrees", "r", "ratio", "thd"), CUTS)
def test_phase_cut_waves(readings_of, edge, degrees, r, ratio, thd):
    wave = waveforms.leading_cut if edge == "leading" else waveforms.trailing_cut
    phase = _phase(4.0)
    readings = readings_of(np.stack((np.sin(phase), wave(phase, np.radians(degrees)))), RATE)[0]
    # Twenty edges a window, each anywhere in a sample of 2 pi 49.87 / 20000 rad.
    step = 2.0 * PI * HERTZ / RATE
    tolerance = 1e-5 + _slope(degrees) * step * 0.5
    rms = readings.rms[1:, 1]
    assert np.mean(rms) == pytest.approx(r / np.sqrt(2.0), rel=tolerance)
    assert np.all(np.abs(rms - r / np.sqrt(2.0)) < 3.0 * readings.u["rms"][1:, 1] + 1e-6)
    assert np.mean(readings.averaging_error[1:, 1]) == pytest.approx(
        ratio - 1.0, abs=2.0 * tolerance
    )
    # To order 50 only: at most 4 % of an ideal edge's THD lies above (closed form at 165 degrees).
    assert np.mean(readings.thd_f[1:, 1]) == pytest.approx(thd, rel=0.045)
    assert np.mean(readings.firing_angle[1:, 1]) == pytest.approx(np.radians(degrees), abs=0.012)


def test_trade_pairs(readings_of):
    """True / averaging 49/24, 75/47, 115/103 V from 121.9 V: common practice, no source.

    An ideal cut with those true values shows 26.6, 49.2 and 101.5 V, so 3 V is the honest
    tolerance; the sign and the order are what matters.
    """
    shown = []
    for degrees, true, meter in (
        (124.258, 49.0, 24.0),
        (101.068, 75.0, 47.0),
        (48.263, 115.0, 103.0),
    ):
        phase = 2.0 * PI * 60.0 * np.arange(40000) / 20000.0 + 0.2
        wave = 121.9 * np.sqrt(2.0) * waveforms.leading_cut(phase, np.radians(degrees))
        readings = readings_of(np.stack((np.sin(phase), wave)), 20000.0)[0]
        assert np.mean(readings.rms[:, 1]) == pytest.approx(true, abs=0.35)
        assert np.mean(readings.averaging[:, 1]) == pytest.approx(meter, abs=3.0)
        assert np.all(readings.averaging[:, 1] < readings.rms[:, 1])
        shown.append(float(np.mean(readings.averaging_error[:, 1])))
    assert shown == sorted(shown)  # the deeper the cut, the further off


def test_ratios_of_the_trade(readings_of):
    """0.637, 0.707 and 1.414; 120 V is 170 V peak; on a sine both agree: common practice."""
    phase = _phase()
    readings = readings_of(169.706 * np.sin(phase), RATE)[0]
    assert readings.rms == pytest.approx(120.0, abs=0.005)
    assert readings.peak_max == pytest.approx(170.0, abs=0.5)
    assert readings.arv / 169.706 == pytest.approx(0.637, abs=0.0005)
    assert readings.rms / 169.706 == pytest.approx(0.707, abs=0.0005)
    assert readings.crest_factor == pytest.approx(1.414, abs=0.0005)
    assert np.all(np.abs(readings.averaging_error) < 2e-5)


def test_equal_thd_opposite_error(readings_of):
    """Sine with a fraction k of third harmonic: e = (1 +- k/3)/sqrt(1 + k^2) - 1 (closed form)."""
    phase = _phase()
    for k, high, low in (
        (0.1, 0.028205, -0.038131),
        (0.2, 0.045953, -0.084791),
        (0.3, 0.053609, -0.13796),
    ):
        for sign, error in ((1.0, high), (-1.0, low)):
            readings = readings_of(np.sin(phase) + sign * k * np.sin(3.0 * phase), RATE)[0]
            assert readings.averaging_error == pytest.approx(error, abs=2e-5)
            assert readings.thd_f == pytest.approx(k, abs=1e-5)
