"""What meters of each kind would show on waves whose integrals are known."""

import numpy as np
import pytest

from dsp.meters import BUILT_IN, Coupling, MeterCard, Response, show
from dsp.waveform import Channel, Kind

RATE = 20000.0
CHANNELS = [Channel("x", "V", Kind.VOLTAGE)]
K = np.pi / (2.0 * np.sqrt(2.0))


def theta(duration=2.0, frequency=49.97):
    return 2.0 * np.pi * frequency * np.arange(int(duration * RATE)) / RATE + 0.2


def error_of(card, measured, x):
    found = measured(np.array([x]), RATE)
    run, readings = found.cut.runs[0], found.readings[0]
    return float(np.mean(show(card, run, readings, CHANNELS)[1][:, 0]))


def pulses(t, duty):
    """Bipolar rectangular pulses about the peaks, beside a trace of sine that gives the phase."""
    off = np.abs(np.mod(t, np.pi) - np.pi / 2.0)
    return np.where(off < duty * np.pi / 2.0, np.sign(np.sin(t)), 0.0)


def test_the_first_card_is_the_averaging_one():
    first = BUILT_IN[0]
    assert (first.name, first.response, first.coupling) == (
        "averaging", Response.MEAN, Coupling.AC,
    )  # fmt: skip
    assert len({card.name for card in BUILT_IN}) == len(BUILT_IN)


@pytest.mark.parametrize("card", BUILT_IN, ids=lambda card: card.name)
def test_every_kind_is_right_on_a_sine(measured, card):
    assert error_of(card, measured, np.sin(theta())) == pytest.approx(
        0.0, abs=2e-3 if card.bandwidth_hz else 1e-4
    )


# Closed forms: a half-wave of unit peak has RMS 1/2, mean and ARV 1/pi, and about its mean an ARV
# of (2/pi) (sqrt(1 - 1/pi^2) - arccos(1/pi)/pi).
HALF_AC_ARV = 2.0 / np.pi * (np.sqrt(1.0 - 1.0 / np.pi**2) - np.arccos(1.0 / np.pi) / np.pi)


@pytest.mark.parametrize(
    ("card", "expected"),
    [
        (MeterCard("a", Response.MEAN, Coupling.AC), K * HALF_AC_ARV / 0.5 - 1.0),
        (MeterCard("b", Response.MEAN, Coupling.DC), K / np.pi / 0.5 - 1.0),
        (MeterCard("c", Response.PEAK, Coupling.DC), 1.0 / np.sqrt(2.0) / 0.5 - 1.0),
        (MeterCard("d", Response.PEAK, Coupling.AC), (1 - 1 / np.pi) / np.sqrt(2.0) / 0.5 - 1),
        (MeterCard("e", Response.RMS, Coupling.DC), 0.0),
        (MeterCard("f", Response.RMS, Coupling.AC), np.sqrt(0.25 - 1 / np.pi**2) / 0.5 - 1.0),
    ],
    ids=lambda value: value.name if isinstance(value, MeterCard) else "",
)
def test_coupling(measured, card, expected):
    x = np.maximum(np.sin(theta()), 0.0)
    assert error_of(card, measured, x) == pytest.approx(expected, abs=3e-4)


@pytest.mark.parametrize(("duty", "expected"), [(0.1, -0.0513), (0.05, -0.32918), (0.01, -0.70)])
def test_crest_factor_limit_cuts_peaks(measured, duty, expected):
    # Pulses of height 1 and RMS sqrt(D), cut at 3 sqrt(D): the error is 3 sqrt(D) - 1 (closed
    # form). Edges fall between samples: at D = 0.01 a pulse is two samples wide.
    card = MeterCard("x", Response.RMS, Coupling.AC, crest_factor_limit=3.0)
    x = pulses(theta(4.0), duty)
    assert error_of(card, measured, x) == pytest.approx(expected, abs=0.01)


def test_a_stated_range_sets_the_ceiling(measured):
    # A sine of RMS 1 in a range of 0.4 at crest factor 3 is cut at 1.2 of its peak of 1.414:
    # closed form of the clipped sine's mean square.
    card = MeterCard("x", Response.RMS, Coupling.AC, crest_factor_limit=3.0, full_range=0.4)
    peak, top = np.sqrt(2.0), 1.2
    a = np.arcsin(top / peak)
    square = peak**2 * (a / np.pi - np.sin(2 * a) / (2 * np.pi)) + top**2 * (1 - 2 * a / np.pi)
    found = error_of(card, measured, peak * np.sin(theta()))
    assert found == pytest.approx(np.sqrt(square) - 1.0, abs=1e-4)


def test_one_pole_of_bandwidth(measured):
    # Fundamental and 21st of equal size through one pole at 1 kHz (closed form).
    t = theta()
    card = MeterCard("x", Response.RMS, Coupling.AC, bandwidth_hz=1000.0)
    gains = [1.0 / (1.0 + (k * 49.97 / 1000.0) ** 2) for k in (1, 21)]
    expected = np.sqrt(sum(gains) / 2.0) - 1.0
    assert error_of(card, measured, np.sin(t) + np.sin(21 * t)) == pytest.approx(expected, abs=1e-5)


def test_gain_does_not_matter_and_the_instruments_own_accuracy_does(measured):
    x = 230.0 * pulses(theta(), 0.4)
    plain, rough = (MeterCard("x", Response.MEAN, accuracy_pct=pct) for pct in (0.0, 1.5))
    channel = [Channel("x", "V", Kind.VOLTAGE, u_gain=0.05)]
    found = measured(x, RATE, channels=channel)
    run, readings = found.cut.runs[0], found.readings[0]
    u_plain = show(plain, run, readings, channel)[2]
    u_rough = show(rough, run, readings, channel)[2]
    assert np.all(u_plain < 0.01)  # 5 % of gain cancels
    assert u_rough == pytest.approx(np.hypot(u_plain, 0.015 / np.sqrt(3.0)))


@pytest.mark.parametrize("card", BUILT_IN, ids=lambda card: card.name)
def test_nothing_gives_no_reading_and_no_warning(measured, card):
    found = measured(np.zeros(20000), RATE)
    for run, readings in zip(found.cut.runs, found.readings, strict=True):
        reading, error, u = show(card, run, readings, CHANNELS)
        assert np.all(reading == 0.0)
        assert np.isnan(error).all() and np.isnan(u).all()
