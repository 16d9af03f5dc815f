"""Firing angles of invented cuts, and none where nothing is cut."""

import mpmath
import numpy as np
import pytest

from dsp.dimmer import cut_harmonic, cut_rms

RATE = 8000.0
ANGLES = (15, 30, 45, 60, 75, 90, 105, 120, 135, 150, 160)


def phase(frequency, seconds, rate=RATE, start=0.1):
    return 2.0 * np.pi * frequency * np.arange(int(seconds * rate)) / rate + start


def cut_sine(theta, degrees, trailing=False, rise=0.0):
    """A sine cut in every half-cycle; `rise` is how long its edge takes, in radians."""
    inside = np.mod(theta, np.pi)
    if trailing:
        inside = np.pi - inside
    past = inside - np.radians(degrees)
    on = np.clip(past / rise, 0.0, 1.0) if rise else past >= 0.0
    return np.sin(theta) * on


def angles(found):
    return np.degrees(found.column("firing_angle")[:, 0])


@pytest.mark.parametrize("order", [1, 3, 7, 25])
@pytest.mark.parametrize("degrees", [20, 90, 150])
def test_harmonics_of_a_cut_are_its_fourier_integral(order, degrees):
    # Quadrature of the definition by mpmath; RMS from Parseval's definition, likewise.
    a = mpmath.radians(degrees)
    whole = mpmath.quad(lambda t: mpmath.sin(t) * mpmath.expj(-order * t), [a, mpmath.pi])
    expected = complex(whole * 2 / mpmath.pi)
    found = complex(cut_harmonic(np.array([float(a)]), order)[0])
    assert found == pytest.approx(expected, abs=1e-12)
    square = mpmath.quad(lambda t: mpmath.sin(t) ** 2, [a, mpmath.pi]) * 2 / mpmath.pi
    assert cut_rms(np.array([float(a)]))[0] == pytest.approx(float(mpmath.sqrt(square)), rel=1e-12)


@pytest.mark.parametrize("frequency", [50.02, 60.013])
@pytest.mark.parametrize("degrees", ANGLES)
def test_mean_angle_of_an_ideal_cut(measured, frequency, degrees):
    # 0.1 % of noise; the edge is placed by point samples 2.25 or 2.7 degrees apart, and over 50
    # windows that evens out to a few hundredths (0.04 at 160 degrees, where little is left).
    rng = np.random.default_rng(degrees)
    theta = phase(frequency, 10.0)
    x = cut_sine(theta, degrees) + rng.normal(0.0, 1e-3, len(theta))
    found = angles(measured(x, RATE))
    assert np.isfinite(found).all()
    assert found.mean() == pytest.approx(degrees, abs=0.06)


def test_stated_uncertainty_covers_the_single_windows(measured):
    # Angles and phases at random: 95 % of the windows within two standard uncertainties.
    rng = np.random.default_rng(7)
    off = []
    for _ in range(25):
        degrees = rng.uniform(15.0, 150.0)
        x = cut_sine(phase(rng.uniform(49.5, 50.5), 2.0, start=rng.uniform(0, 6.28)), degrees)
        found = measured(x, RATE)
        off.append((angles(found) - degrees) / np.degrees(found.u("firing_angle")[:, 0]))
    assert np.mean(np.abs(np.concatenate(off)) <= 2.0) >= 0.95


@pytest.mark.parametrize("degrees", [15, 45, 90, 135, 160])
def test_trailing_edge_counts_what_is_cut_away(measured, degrees):
    found = angles(measured(cut_sine(phase(60.013, 4.0), degrees, trailing=True), RATE))
    assert found.mean() == pytest.approx(degrees, abs=0.1)


@pytest.mark.parametrize("degrees", [30, 60, 90, 120])
def test_angle_is_that_of_the_middle_of_a_slow_edge(measured, degrees):
    rise = 350e-6 * 2.0 * np.pi * 50.02
    found = angles(measured(cut_sine(phase(50.02, 4.0), degrees, rise=rise), RATE))
    assert found.mean() == pytest.approx(degrees + np.degrees(rise) / 2.0, abs=0.3)


@pytest.mark.parametrize("rate", [4000.0, 12800.0])
@pytest.mark.parametrize("degrees", [30, 90, 140])
def test_other_rates(measured, rate, degrees):
    found = angles(measured(cut_sine(phase(50.02, 6.0, rate), degrees), rate))
    assert np.isfinite(found).mean() > 0.9
    assert np.nanmean(found) == pytest.approx(degrees, abs=0.3)


def test_a_distorted_supply_shifts_it_by_little(measured):
    # 3 % of 3rd and 5th: no closed form says what the angle of such a cut is; it is where the
    # edge stands, and two degrees is what low orders pull at most.
    theta = phase(50.0, 2.0)
    for degrees in (30, 60, 90, 120, 150):
        supply = np.sin(theta) + 0.03 * np.sin(3 * theta) - 0.03 * np.sin(5 * theta)
        on = np.mod(theta, np.pi) >= np.radians(degrees)
        found = angles(measured(supply * on, RATE))
        assert found.mean() == pytest.approx(degrees, abs=3.0)


def pulse(theta, width):
    """A rectifier's current: half a sine of `width` degrees about each peak."""
    off = np.mod(theta, np.pi) - np.pi / 2.0
    half = np.radians(width) / 2.0
    return np.where(np.abs(off) < half, np.sign(np.sin(theta)) * np.cos(off / half * np.pi / 2), 0)


def six_pulse(theta):
    inside = np.mod(theta, np.pi)
    return np.where(np.abs(inside - np.pi / 2) < np.pi / 3, np.sign(np.sin(theta)), 0.0)


NOT_CUT = {
    "sine": np.sin,
    "triangle": lambda t: np.arcsin(np.sin(t)),
    "square": lambda t: np.sign(np.sin(t)),
    "saw": lambda t: np.mod(t / np.pi, 2.0) - 1.0,
    "clipped": lambda t: np.clip(np.sin(t), -0.8, 0.8),
    "half wave": lambda t: np.maximum(np.sin(t), 0.0),
    "six-pulse": six_pulse,
    "flat top": lambda t: np.sin(t) + 0.05 * np.sin(3 * t) + 0.03 * np.sin(5 * t),
    "peaked": lambda t: np.sin(t) - 0.1 * np.sin(3 * t) + 0.05 * np.sin(5 * t),
    "cut by 5 degrees": lambda t: cut_sine(t, 5),
    **{f"pulse {w}": lambda t, w=w: pulse(t, w) for w in (30, 45, 60, 75, 90, 120)},
}


@pytest.mark.parametrize("name", NOT_CUT)
def test_no_angle_where_nothing_is_cut(measured, name):
    found = angles(measured(NOT_CUT[name](phase(50.02, 3.0)), RATE))
    assert len(found) == 14
    assert np.isnan(found).all()


def test_no_angle_of_noise_or_a_distorted_supply(measured):
    rng = np.random.default_rng(3)
    theta = phase(50.0, 2.0)
    assert np.isnan(angles(measured(rng.normal(size=len(theta)), RATE))).all()
    for _ in range(40):
        x = np.sin(theta)
        for order in range(3, 26, 2):
            size = rng.uniform(0.0, 0.06 if order < 8 else 0.012)
            x = x + size * np.sin(order * theta + rng.uniform(0.0, 6.28))
        assert np.isnan(angles(measured(x, RATE))).all()
