"""Power of voltage/current pairs: a worked case, a delayed channel, signs."""

import numpy as np
import pytest

from dsp.measure import measure
from dsp.power import measure_pairs
from dsp.waveform import Channel, Kind, Waveform
from dsp.windowing import Windower

RATE = 8000.0
# Orders, RMS and degrees of a distorted supply and its load. Believed the worked example of IEEE
# 1459's annex (from memory, not read); the results below follow from its definitions.
VOLTS = {1: (100.0, 0.0), 3: (8.0, -70.0), 5: (15.0, 140.0), 7: (5.0, 20.0)}
AMPERES = {1: (100.0, -30.0), 3: (20.0, -165.0), 5: (15.0, 233.0), 7: (10.0, 288.0)}


def wave(lines, t):
    return sum(
        rms * np.sqrt(2.0) * np.sin(order * t + np.radians(degrees))
        for order, (rms, degrees) in lines.items()
    )


def pair(v, i, delay=0.0, rate=RATE, **known):
    channels = [
        Channel("U", "V", Kind.VOLTAGE, **known),
        Channel("I", "A", Kind.CURRENT, delay=delay, **known),
    ]
    windower = Windower(2)
    runs = windower.feed(Waveform(np.array([v, i]), rate, 0)) + windower.flush()
    readings = measure(runs[0], channels)
    return measure_pairs(runs[0], readings, [(0, 1)], channels), readings


def angle(frequency, rate=RATE, late=0.0):
    return 2.0 * np.pi * frequency * (np.arange(int(rate)) / rate + late)


def test_worked_case():
    t = angle(50.06)
    power, readings = pair(wave(VOLTS, t), wave(AMPERES, t))
    for found, expected in (
        (readings.rms[:, 0], 101.557865),
        (readings.rms[:, 1], 103.561576),
        (readings.thd_f[:, 0], 0.177200),
        (readings.thd_f[:, 1], 0.269258),
        (power.p[:, 0], 8632.788554),
        (power.s[:, 0], 10517.492572),
        (power.pf[:, 0], 0.820803),
        (power.dpf[:, 0], 0.866025),
        (power.q1[:, 0], 5000.0),
        (power.distortion[:, 0], 3258.473569),
    ):
        assert found == pytest.approx(expected, rel=3e-6)


@pytest.mark.parametrize("delay", [50e-6, -125e-6])
def test_a_channel_sampled_later_is_turned_back(delay):
    t = angle(49.93)
    straight, _ = pair(wave(VOLTS, t), wave(AMPERES, t))
    late, _ = pair(wave(VOLTS, t), wave(AMPERES, angle(49.93, late=delay)), delay)
    for name in ("p", "q1", "dpf", "pf"):
        assert getattr(late, name) == pytest.approx(getattr(straight, name), rel=1e-5)


def test_a_leading_current_and_one_that_flows_back():
    t = angle(50.0)
    power, _ = pair(np.sin(t), np.sin(t + np.pi / 3))
    assert power.q1[:, 0] == pytest.approx(-0.5 * np.sin(np.pi / 3), rel=1e-6)
    power, _ = pair(np.sin(t), -np.sin(t))
    assert power.pf[:, 0] == pytest.approx(-1.0, rel=1e-6)


@pytest.mark.parametrize("degrees", [30, 60, 90, 120, 150])
def test_a_resistor_behind_a_dimmer_seen_from_the_supply(degrees):
    # Full-on = 1 V, 1 A: P = r^2, PF = r, Q1 = sin^2 a / pi, with r the load's RMS (closed form).
    # 64 kS/s so that the edges' place between samples hardly counts.
    t, a = angle(49.87, 64000.0), np.radians(degrees)
    v = np.sqrt(2.0) * np.sin(t)
    r = np.sqrt(1.0 - a / np.pi + np.sin(2 * a) / (2 * np.pi))
    power, _ = pair(v, np.where(np.mod(t, np.pi) >= a, v, 0.0), rate=64000.0)
    assert power.p[:, 0].mean() == pytest.approx(r * r, abs=2e-3)
    assert power.pf[:, 0].mean() == pytest.approx(r, abs=2e-3)
    assert power.q1[:, 0].mean() == pytest.approx(np.sin(a) ** 2 / np.pi, abs=2e-3)


def test_nothing_has_no_power_factor():
    power, _ = pair(np.sin(angle(50.0)), np.zeros(int(RATE)))
    assert np.all(power.p == 0.0) and np.all(power.s == 0.0)
    assert np.isnan(power.pf).all() and np.isnan(power.dpf).all()


def test_uncertainty_covers_gain_and_angle():
    """95 % of drawn gains and offsets within two standard uncertainties of P."""
    rng = np.random.default_rng(6)
    t = angle(50.0)
    v, i = np.sqrt(2) * np.sin(t), np.sqrt(2) * np.sin(t - 0.6)
    inside = 0
    for _ in range(200):
        gains = 1.0 + 0.01 * rng.standard_normal(2)
        power, _ = pair(gains[0] * v, gains[1] * i, u_gain=0.01)
        inside += abs(power.p[0, 0] - np.cos(0.6)) <= 2.0 * power.u_p[0, 0]
    assert inside / 200 >= 0.91  # three standard deviations of a count of 200 below 95 %
