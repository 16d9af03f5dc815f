"""Nothing, DC, noise, clipping, few samples: a figure where there is one, a flag, no warning."""

import numpy as np
import pytest

from dsp.waveform import Channel, Kind
from dsp.window import Flag

RATE = 8000.0
T = np.arange(16000) / RATE
SINE = np.sin(2.0 * np.pi * 50.0 * T)

ALWAYS = ("rms", "mean", "arv", "peak_max", "peak_min", "averaging")
ALWAYS_U = ("rms", "mean", "arv", "peak", "averaging")
POOR = {
    "nothing": 0.0 * T,
    "DC": 0.0 * T + 2.5,
    "noise": np.random.default_rng(2).standard_normal(len(T)),
    "one step of noise": np.round(np.random.default_rng(3).standard_normal(len(T)) * 0.4),
    "one pulse": np.where(np.arange(len(T)) == 7000, 100.0, 0.0),
    "huge": 1e30 * SINE,
    "tiny": 1e-30 * SINE,
    "one sample": np.array([3.0]),
    "two samples": np.array([3.0, -3.0]),
    "half a cycle": SINE[:80],
    "a cycle and a half": SINE[3:245],
    "sine": SINE,
}


@pytest.mark.parametrize("name", POOR)
@pytest.mark.parametrize("step", [0.0, 0.01])
def test_what_exists_is_finite(measured, name, step):
    channel = Channel("x", "V", Kind.VOLTAGE, step=step, u_gain=0.01, u_offset=0.001)
    found = measured(POOR[name], RATE, channels=[channel])
    assert len(found.cut) > 0
    for figure in ALWAYS:
        assert np.isfinite(found.column(figure)).all(), figure
    for figure in ALWAYS_U:
        assert np.isfinite(found.u(figure)).all(), figure
        if step:  # nothing is known for certain of a code
            assert np.all(found.u(figure) > 0.0), figure
    live = found.column("rms") > 0.0
    for figure in ("crest_factor", "averaging_error"):
        assert np.array_equal(np.isfinite(found.column(figure)), live), figure
        assert np.array_equal(np.isfinite(found.u(figure)), live), figure
    thd, u_thd = found.column("thd_f"), found.u("thd_f")
    assert np.array_equal(np.isfinite(thd), np.isfinite(u_thd))
    if name == "sine":
        assert np.isfinite(thd).all()


def test_dc_is_all_mean_and_no_averaging_reading(measured):
    found = measured(POOR["DC"], RATE)
    assert found.column("rms") == pytest.approx(2.5)
    assert found.column("mean") == pytest.approx(2.5)
    assert found.column("arv") == pytest.approx(2.5)
    assert found.column("averaging") == pytest.approx(0.0, abs=1e-12)
    assert found.column("averaging_error") == pytest.approx(-1.0)
    assert np.isnan(found.column("thd_f")).all()


def test_gaussian_noise_reads_low_by_its_closed_form(measured):
    # Mean |x| of a normal deviate is sqrt(2 / pi); 60 windows of 1600 samples: 0.2 % of scatter.
    x = np.random.default_rng(12).standard_normal(96000)
    error = measured(x, RATE).column("averaging_error")[:, 0]
    expected = np.pi / (2 * np.sqrt(2)) * np.sqrt(2 / np.pi) - 1.0
    assert error.mean() == pytest.approx(expected, abs=0.002)


def test_two_samples_in_a_row_at_a_rail_are_clipped(measured):
    channel = [Channel("x", "V", Kind.VOLTAGE, step=0.01, low=-0.9, high=0.9)]

    def flags(x):
        found = measured(x, RATE, channels=channel)
        return [Flag(int(flag)) for r in found.readings for flag in r.flags[:, 0]]

    assert all(Flag.CLIPPED in flag for flag in flags(np.clip(SINE, -0.9, 0.9)))
    assert not any(Flag.CLIPPED in flag for flag in flags(0.85 * SINE))
    once = 0.85 * SINE
    once[5000] = 0.9  # a single one is a peak that just reaches it
    assert not any(Flag.CLIPPED in flag for flag in flags(once))
    once[5001] = 0.95  # beyond is at it
    assert sum(Flag.CLIPPED in flag for flag in flags(once)) == 1
    once[5001] = -0.9  # from rail to rail is clipped too
    assert sum(Flag.CLIPPED in flag for flag in flags(once)) == 1


@pytest.mark.parametrize(
    ("size", "low"), [(0.0, True), (0.02, True), (0.024, True), (0.06, False), (0.9, False)]
)
def test_low_signal(measured, size, low):
    # Rails at +-1: 2 % of full scale is an RMS of 0.02; ten steps of 0.001 are less.
    channel = [Channel("x", "V", Kind.VOLTAGE, step=0.001, low=-1.0, high=1.0)]
    found = measured(size * SINE, RATE, channels=channel)
    assert all(
        (Flag.LOW_SIGNAL in Flag(int(flag))) is low
        for r in found.readings
        for flag in r.flags[:, 0]
    )


def test_a_neutral_with_triplens_alone_has_no_thd(measured):
    x = np.array([SINE, np.sin(2.0 * np.pi * 150.0 * T)])
    found = measured(x, RATE)
    assert np.isfinite(found.column("thd_f")[:, 0]).all()
    assert np.isnan(found.column("thd_f")[:, 1]).all()
    assert found.column("rms")[:, 1] == pytest.approx(np.sqrt(0.5), rel=1e-6)


def test_channels_do_not_touch_each_other(measured):
    rng = np.random.default_rng(1)
    rows = [SINE, 3.0 + 0.2 * rng.standard_normal(len(T)), np.sign(SINE), 0.0 * T]
    together = measured(np.array(rows), RATE)
    for k, row in enumerate(rows[1:], start=1):
        pair = measured(np.array([SINE, row]), RATE)
        for figure in ("rms", "mean", "arv", "peak_max", "averaging", "fundamental", "thd_f"):
            alone = pair.column(figure)[:, 1]
            assert together.column(figure)[:, k] == pytest.approx(alone, rel=1e-12, nan_ok=True)


def test_long_runs_equal_short_ones(measured):
    """Blocks and groups inside are no more than a matter of speed: 60 s at once, or by 0.4 s."""
    t = np.arange(480_000) / RATE
    x = np.array([np.sin(2 * np.pi * 50.03 * t), np.sign(np.sin(2 * np.pi * 50.03 * t + 1))])
    x += 0.01 * np.random.default_rng(0).standard_normal(x.shape)
    whole, pieces = measured(x, RATE), measured(x, RATE, sizes=3200)
    for figure in ("rms", "mean", "arv", "peak_max", "averaging", "thd_f", "firing_angle"):
        expected = pieces.column(figure)
        assert whole.column(figure) == pytest.approx(expected, rel=1e-9, abs=1e-9, nan_ok=True)


def test_time_is_counted_from_where_it_is_said(measured, cut):
    from dsp.measure import measure

    run = cut(SINE, RATE).runs[0]
    readings = measure(run, [Channel("x", "V")], 50.0, (4000, 100.0))
    assert readings.start == pytest.approx(100.0 + (run.begins - 4000) / RATE)
    assert readings.duration == pytest.approx(0.2, rel=1e-6)
