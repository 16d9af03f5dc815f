"""Real recordings: what is read against an independent reader, what is measured against sums
worked out here with scipy and numpy, on every analogue channel and window.

Recordings: source package pyComtrade 0.2.0, examples/ (5760 samples a second, 50 and 60 Hz,
generators and a transformer, with disturbances). Reader: package comtrade 0.2.0.
"""

import hashlib
from dataclasses import dataclass

import comtrade
import numpy as np
import pytest
from scipy.integrate import simpson
from scipy.interpolate import CubicSpline
from scipy.optimize import least_squares

from acquisition.recordings.open import open_recording
from acquisition.recordings.recording import RecordingOptions
from dsp.measure import measure
from dsp.waveform import Channel, Waveform
from dsp.windowing import Windower

# name: (first digits of the sha256 of its data, analogue channels, sets, Hz)
RECORDINGS = {
    "test1": ("d6c88dd2d72d", 6, 24768, 50.0),
    "test2": ("1084d2a3c46f", 26, 13248, 60.0),
    "test3": ("4dd81b74d282", 31, 24768, 50.0),
}
RATE = 5760.0
SINE = np.pi / (2.0 * np.sqrt(2.0))  # form factor of a sine (closed form)


@dataclass(frozen=True, eq=False)
class Row:
    """One window: what was measured and what was worked out here, each (channels,)."""

    duration: float
    cycles: int
    frequency: float
    sets: float
    measured: dict[str, np.ndarray]
    own: dict[str, np.ndarray]


def sized(path):
    """(samples in V and A, hints, nominal) as read by the program."""
    recording = open_recording(path, RecordingOptions())
    codes = np.concatenate([b.codes for b in recording.blocks()], axis=1).astype(np.float64)
    hints = recording.info.channels
    gain = np.array([[hint.gain] for hint in hints])
    offset = np.array([[hint.offset_codes] for hint in hints])
    return gain * (codes + offset), hints, recording.info


def by_the_other_reader(path):
    other = comtrade.load(str(path), use_double_precision=True)
    worth = [{"kV": 1e3, "kA": 1e3}.get(channel.uu, 1.0) for channel in other.cfg.analog_channels]
    return np.array(other.analog) * np.array(worth)[:, None], other


@pytest.mark.parametrize("name", RECORDINGS)
def test_every_channel_is_read_as_the_independent_reader_does(real_recordings, name):
    digest, channels, sets, nominal = RECORDINGS[name]
    path = real_recordings / f"{name}.cfg"
    data = path.with_suffix(".dat").read_bytes()
    assert hashlib.sha256(data).hexdigest().startswith(digest)
    samples, hints, info = sized(path)
    expected, other = by_the_other_reader(path)
    assert samples.shape == expected.shape == (channels, sets)
    # One rounding more: gain * (x + b / a) for a * x + b.
    assert np.allclose(samples, expected, rtol=4e-16 * 4, atol=1e-12)
    assert info.rate == RATE
    assert info.nominal_hz == nominal
    assert [hint.name for hint in hints] == [c.name for c in other.cfg.analog_channels]
    assert info.started == other.start_timestamp.isoformat(timespec="microseconds")


@pytest.mark.filterwarnings("ignore:Unsupported datetime objects")
def test_the_small_samples_are_read_as_the_independent_reader_does(small_samples):
    read = 0
    for path in sorted([*small_samples.glob("*.cfg"), *small_samples.glob("*.cff")]):
        if path.suffix == ".cfg" and not path.with_suffix(".dat").is_file():
            continue  # some share the data of another
        samples, _, info = sized(path)
        read += 1
        if "iso8859" in path.name:
            assert info.rate  # the other reader takes only UTF-8 unless told
            continue
        expected, _ = by_the_other_reader(path)
        assert np.allclose(samples, expected, rtol=1e-6, atol=1e-12)  # .cff holds float32
    assert read >= 5


def rows(path):
    """Every window, measured by the program and worked out here."""
    samples, hints, info = sized(path)
    truth, _ = by_the_other_reader(path)
    reference = next(k for k, hint in enumerate(hints) if hint.unit == "V")
    windower = Windower(len(hints), reference, info.nominal_hz)
    runs = [*windower.feed(Waveform(samples, RATE, 0)), *windower.flush()]
    channels = [Channel(hint.name, hint.unit, step=hint.gain) for hint in hints]
    places = np.arange(truth.shape[1])
    itself = CubicSpline(places, truth, axis=1)
    square = CubicSpline(places, truth**2, axis=1)
    found = []
    for run in runs:
        readings = measure(run, channels, info.nominal_hz)
        for w in range(len(run)):
            a, b, cycles = float(run.begins[w]), float(run.ends[w]), int(run.cycles[w])
            assert cycles == (10 if info.nominal_hz == 50.0 else 12)
            own = worked_out(truth, itself, square, a, b, cycles, reference)
            names = ("rms", "mean", "arv", "fundamental", "thd_f", "averaging_error")
            measured = {name: getattr(readings, name)[w] for name in names}
            found.append(
                Row((b - a) / RATE, cycles, float(readings.frequency[w]), b - a, measured, own)
            )
    return found, np.array([hint.gain for hint in hints])


def worked_out(truth, itself, square, a, b, cycles, reference):
    """Figures between a and b, from splines through the samples and a fit of harmonics."""
    length = b - a
    mean = itself.integrate(a, b) / length
    rms = np.sqrt(square.integrate(a, b) / length)
    fine = np.linspace(a, b, 2 * int(8 * length) + 1)
    between = itself(fine)
    arv = simpson(np.abs(between), x=fine, axis=1) / length
    coupled = simpson(np.abs(between - mean[:, None]), x=fine, axis=1) / length
    inside = np.arange(int(np.ceil(a)), int(np.floor(b)) + 1)
    phase = 2.0 * np.pi * cycles * (inside - a) / length
    orders = np.arange(1, min(50, int(0.45 * length / cycles)) + 1)
    basis = np.concatenate(
        [
            np.ones((len(inside), 1)),
            np.cos(np.outer(phase, orders)),
            np.sin(np.outer(phase, orders)),
        ],
        axis=1,
    )
    fit = np.linalg.lstsq(basis, truth[:, inside].T, rcond=None)[0][1:]
    lines = np.hypot(fit[: len(orders)], fit[len(orders) :]) / np.sqrt(2.0)
    first = np.maximum(lines[0], 1e-30)
    return {
        "rms": rms,
        "mean": mean,
        "arv": arv,
        "fundamental": lines[0],
        "thd_f": np.sqrt((lines[1:] ** 2).sum(axis=0)) / first,
        "averaging_error": SINE * coupled / rms - 1.0,
        "frequency": np.array(_sine_fit(truth[reference, inside], cycles * RATE / length)),
    }


def _sine_fit(samples, guess):
    """Frequency of a four-parameter sine fit. [Hz]"""
    t = np.arange(len(samples)) / RATE
    scale = np.sqrt(2.0 * np.mean(samples**2))

    def off(p):
        angle = 2.0 * np.pi * guess * (1.0 + p[3]) * t
        return p[0] * np.cos(angle) + p[1] * np.sin(angle) + p[2] - samples / scale

    return guess * (1.0 + least_squares(off, [0.5, 0.5, 0.0, 0.0], xtol=1e-14, ftol=1e-14).x[3])


@pytest.mark.slow
@pytest.mark.parametrize("name", RECORDINGS)
def test_every_channel_is_measured_as_worked_out_here(real_recordings, name, record_property):
    found, steps = rows(real_recordings / f"{name}.cfg")
    assert len(found) == (11 if name == "test2" else 21)
    misses = {}
    for row in found:
        own, rms = row.own, row.own["rms"]
        sine = (own["fundamental"] > 0.5 * rms) & (own["fundamental"] > 20.0 * steps)
        # One sample astray at each cut, for idle channels and sudden changes.
        astray = 2.0 / row.sets
        assert np.all(np.abs(row.measured["rms"] / rms - 1.0) < astray)
        assert np.all(np.abs(row.measured["mean"] - own["mean"]) < astray * rms)
        for figure in ("rms", "arv", "fundamental"):
            off = np.abs(row.measured[figure] / own[figure] - 1.0)[sine]
            misses.setdefault(figure, []).append(off)
        for figure in ("thd_f", "averaging_error"):
            misses.setdefault(figure, []).append(np.abs(row.measured[figure] - own[figure])[sine])
        misses.setdefault("frequency", []).append(
            [abs(row.frequency / float(own["frequency"]) - 1.0)]
        )
    for figure, (median, worst) in LIMITS.items():
        off = np.concatenate(misses[figure])
        record_property(figure, f"median {np.median(off):.1e}, worst {off.max():.1e}")
        assert np.median(off) < median, figure
        assert off.max() < worst, figure


def test_near_sines_raise_no_alarm(real_recordings):
    """In the undisturbed first window of test1 an averaging meter is within 0.4 % everywhere."""
    first = rows(real_recordings / "test1.cfg")[0][0]
    assert np.all(np.abs(first.own["averaging_error"]) < 0.004)
    assert np.all(np.abs(first.measured["averaging_error"]) < 0.004)


# figure: (median, worst) difference, relative; of thd_f and averaging_error the fraction itself.
# The two ways part where a disturbance falls into a window, and, for |x|, between samples near 0.
LIMITS = {
    "rms": (1e-5, 2e-4),
    "arv": (2e-5, 5e-4),
    "fundamental": (1e-5, 1e-3),
    "thd_f": (1e-5, 2e-3),
    "averaging_error": (2e-5, 5e-4),
    "frequency": (2e-5, 1e-3),
}
