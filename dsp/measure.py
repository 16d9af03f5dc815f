"""Everything about a run of windows: amplitudes, harmonics, averaging error, uncertainties.

Uncertainties are combined as in the GUM (JCGM 100): scatter of the cycles (widened by their lag-1
correlation), the window's ends, quantisation, edges that fall between samples, calibration. The
averaging error compares two figures of the same samples, so the scale's uncertainty cancels in it.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from dsp.amplitude import Amplitudes, measure_amplitudes
from dsp.dimmer import firing_angle
from dsp.edges import MARGIN
from dsp.harmonics import ORDERS, phasors
from dsp.reading import Readings
from dsp.waveform import Channel
from dsp.window import Flag, Windows

Floats = npt.NDArray[np.float64]

# A mean-responding meter shows the ARV times the form factor of a sine, pi / (2 sqrt 2).
SINE_FORM_FACTOR = np.pi / (2.0 * np.sqrt(2.0))

# Below these a comparison of meters says nothing: 2 % of the converter's range, or ten codes
# (common practice, no source).
LOW_OF_RANGE, LOW_OF_STEPS = 0.02, 10.0
UNLOCKED_PARTS = 10
BLOCK = 120_000  # samples summed at a time: with what comes of them they stay in a cache
# Below this share of the RMS what stands at the fundamental is leftover, and THD-F says nothing.
NO_FUNDAMENTAL = 0.02


def measure(
    windows: Windows,
    channels: Sequence[Channel],
    nominal: float | None = None,
    time0: tuple[int, float] = (0, 0.0),
) -> Readings:
    """Measure every channel in every window.

    Args:
        windows: a run; neighbours touch.
        channels: one for each row of the samples.
        nominal: mains frequency [Hz], when known.
        time0: a set index and its time [s]; windows are placed from there.
    """
    pad_left = max(0, MARGIN + 1 - (int(np.floor(windows.begins[0])) - windows.first))
    reach = windows.first + windows.samples.shape[1]
    pad_right = max(0, MARGIN + 2 - (reach - int(np.floor(windows.ends[-1]))))
    samples = windows.samples
    if pad_left or pad_right:  # only at the very ends of the data
        samples = np.pad(samples, ((0, 0), (pad_left, pad_right)), mode="edge")
    first = windows.first - pad_left
    begins, ends = windows.begins - first, windows.ends - first
    count, c = len(windows), len(channels)
    cycles = int(windows.cycles[0])
    parts = cycles or (UNLOCKED_PARTS if float(np.min(ends - begins)) >= 10 * UNLOCKED_PARTS else 1)
    if cycles:
        lines = phasors(samples, begins, ends, cycles)
    else:
        lines = np.full((count, c, ORDERS), np.nan, np.complex128)
    found = _by_blocks(samples, begins, ends, parts, cycles > 0)
    end_error = np.where(
        np.isfinite(windows.u_frequency), windows.u_frequency / windows.frequency, 0.0
    )
    scales = _Scales.of(channels)
    rows, u_rows = _figures(found, lines.transpose(1, 0, 2), scales, end_error, ends - begins)
    columns = {name: np.ascontiguousarray(row.T) for name, row in rows.items()}
    u = {name: np.ascontiguousarray(row.T) for name, row in u_rows.items()}
    flags = np.repeat(windows.flags[:, None], c, axis=1)
    flags[_low(rows["rms"], scales).T] |= int(Flag.LOW_SIGNAL)
    touches = (found.peak_max >= scales.high) | (found.peak_min <= scales.low)
    for k in map(int, np.flatnonzero(touches.any(axis=1))):
        clipped = _clipped(samples[k], begins, ends, channels[k])
        flags[:, k] |= np.where(clipped, int(Flag.CLIPPED), 0)
    nu = windows.frequency / windows.rate
    # A jump lies anywhere between its two samples (rectangular).
    between = (
        2.0 * np.pi / np.sqrt(12.0) * np.where(nu > 0.0, nu, 0.0)[:, None] * found.jump_share.T
    )
    columns["firing_angle"], u["firing_angle"] = firing_angle(lines, nu, between)
    u["frequency"] = np.repeat(windows.u_frequency[:, None], c, axis=1)
    return Readings(
        start=time0[1] + (windows.begins - time0[0]) / windows.rate,
        duration=(windows.ends - windows.begins) / windows.rate,
        cycles=windows.cycles,
        frequency=windows.frequency,
        locks=windows.locks,
        harmonics=lines,
        u=u,
        flags=flags,
        **columns,
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Scales:
    """What is known of the channels, (c, 1) each."""

    step: Floats
    low: Floats
    high: Floats
    u_gain: Floats
    u_offset: Floats

    @classmethod
    def of(cls, channels: Sequence[Channel]) -> "_Scales":
        rows = [(k.step, k.low, k.high, k.u_gain, k.u_offset) for k in channels]
        return cls(*np.array(rows, np.float64).T[:, :, None])


def _by_blocks(
    samples: Floats, begins: Floats, ends: Floats, parts: int, cyclic: bool
) -> Amplitudes:
    """Amplitudes of all windows, a cache's worth of samples at a time."""
    each = max(1, int(BLOCK / len(samples) / float((ends - begins).mean())))
    blocks = []
    for at in range(0, len(begins), each):
        part = slice(at, at + each)
        low = int(begins[at]) - MARGIN - 1
        high = int(ends[part][-1]) + MARGIN + 3
        blocks.append(
            measure_amplitudes(
                samples[:, low:high], begins[part] - low, ends[part] - low, parts, cyclic
            )
        )
    if len(blocks) == 1:
        return blocks[0]
    names = Amplitudes.__slots__
    return Amplitudes(
        **{name: np.concatenate([getattr(b, name) for b in blocks], axis=1) for name in names}
    )


def _figures(
    found: Amplitudes,
    lines: npt.NDArray[np.complex128],
    scales: _Scales,
    end_error: Floats,
    width: Floats,
) -> tuple[Mapping[str, Floats], Mapping[str, Floats]]:
    """The figures of all channels and their standard uncertainties, (c, w) each."""
    square = np.maximum(found.mean_square.mean(2), 0.0)
    rms = np.sqrt(square)
    arv_ac = np.maximum(found.arv_ac.mean(2), 0.0)
    arv = np.maximum(found.arv, 0.0)
    averaging = SINE_FORM_FACTOR * arv_ac
    peak = np.maximum(np.abs(found.peak_max), np.abs(found.peak_min))
    live, rectified = rms > 0.0, arv > 0.0
    safe = np.where(live, rms, 1.0)
    error = np.where(live, averaging / safe - 1.0, 0.0)
    crest = peak / safe
    form = rms / np.where(rectified, arv, 1.0)
    measured = np.isfinite(lines.real)
    power = np.where(measured, lines.real, 0.0) ** 2 + np.where(measured, lines.imag, 0.0) ** 2
    fundamental = np.sqrt(power[:, :, 0])
    # A neutral with nothing but triplens, a dead channel: no fundamental to compare with.
    has = fundamental > NO_FUNDAMENTAL * safe * live
    base = np.where(has, fundamental, 1.0)
    thd = np.sqrt(power[:, :, 1:].sum(2)) / base

    sigma = scales.step / np.sqrt(12.0)  # of one sample: quantisation, rectangular
    per_window = sigma / np.sqrt(width)
    per_part = per_window * np.sqrt(found.mean_square.shape[2])
    offset = scales.u_offset**2
    u_square = (
        _scatter(found.mean_square, 2.0 * rms * per_part)
        + (end_error * square) ** 2
        + found.jump_square**2
        + (2.0 * rms * per_window) ** 2
        + sigma**4
    )
    own = np.where(live, u_square / (2.0 * safe) ** 2, sigma**2)  # variance of the RMS
    relative = own / safe**2
    u_rms = np.sqrt(
        own + (scales.u_gain * rms) ** 2 + np.where(live, found.mean / safe, 1.0) ** 2 * offset
    )
    arv_own = (
        _scatter(found.arv_ac, per_part)
        + (end_error * arv) ** 2
        + found.jump_arv**2
        + per_window**2
    )
    u_arv = np.sqrt(arv_own + (scales.u_gain * arv) ** 2 + offset)
    # Scatter of the ratio itself: cycles that grow together leave it alone.
    ratio = found.mean_square
    ratio = SINE_FORM_FACTOR * found.arv_ac / np.sqrt(np.where(ratio > 0.0, ratio, 1.0))
    jump = SINE_FORM_FACTOR * found.jump_arv / safe - (1.0 + error) * found.jump_square / (
        2.0 * safe**2
    )
    u_error = np.sqrt(
        _scatter(ratio, per_part / safe)
        + jump**2
        + (end_error * 0.5) ** 2
        + (per_window / safe) ** 2 * 2.0
        + (sigma / safe) ** 4
        + (found.mean / safe**2) ** 2 * offset
    )
    u_peak = np.sqrt(sigma**2 + (scales.u_gain * peak) ** 2 + offset)
    u_crest = np.sqrt((u_peak / safe) ** 2 + crest**2 * relative)
    noise = np.sqrt(2.0) * per_window
    u_fundamental = np.sqrt(
        noise**2 + (scales.u_gain * fundamental) ** 2 + relative * fundamental**2
    )
    orders = np.maximum(measured[:, :, 1:].sum(2), 1)
    # Noise adds to every line; where it outweighs the harmonics it lifts the THD itself.
    u_thd = np.sqrt(
        np.sqrt(orders) * (noise / base) ** 2
        + thd**2 * relative
        + found.jump_square / np.where(live, square, 1.0) / width
    )
    u_form = form * np.sqrt(relative + arv_own / np.where(rectified, arv, 1.0) ** 2)
    u_averaging = SINE_FORM_FACTOR * np.sqrt(arv_own + (scales.u_gain * arv_ac) ** 2)
    u_mean = np.sqrt(
        per_window**2 + offset + (scales.u_gain * found.mean) ** 2 + (end_error * rms) ** 2
    )
    figures = {
        "rms": rms,
        "mean": found.mean,
        "arv": arv,
        "peak_max": found.peak_max,
        "peak_min": found.peak_min,
        "crest_factor": np.where(live, crest, np.nan),
        "form_factor": np.where(rectified, form, np.nan),
        "fundamental": np.where(measured[:, :, 0], fundamental, np.nan),
        "thd_f": np.where(has, thd, np.nan),
        "averaging": averaging,
        "averaging_error": np.where(live, error, np.nan),
    }
    uncertain = {
        "rms": u_rms,
        "mean": u_mean,
        "arv": u_arv,
        "peak": u_peak,
        "crest_factor": np.where(live, u_crest, np.nan),
        "form_factor": np.where(rectified, u_form, np.nan),
        "fundamental": np.where(measured[:, :, 0], u_fundamental, np.nan),
        "thd_f": np.where(has, u_thd, np.nan),
        "averaging": u_averaging,
        "averaging_error": np.where(live, u_error, np.nan),
    }
    return figures, uncertain


def _scatter(parts: Floats, rounding: Floats) -> Floats:
    """Variance of the mean of correlated parts (c, w, p); 0 for a single part.

    Rounding alone should scatter the parts by `rounding` (c, w). Where they scatter by far less,
    sampling keeps step with a quiet wave: each part repeats the errors of the first and their mean
    is no better than one; and a mirrored half-cycle repeats them once more, which leaves half as
    many. Twice the variance found is held against it, as few parts tell it poorly.
    """
    n = parts.shape[2]
    if n < 2:
        return np.zeros(parts.shape[:2])
    rest = parts - parts.mean(2, keepdims=True)
    total = np.einsum("cwp,cwp->cw", rest, rest)
    variance = total / (n - 1)
    lag = np.einsum("cwp,cwp->cw", rest[:, :, 1:], rest[:, :, :-1])
    lag = np.minimum(np.maximum(lag, 0.0) / np.maximum(total, 1e-300), 0.9)
    repeated = 2.0 * np.maximum(rounding**2 - 2.0 * variance, 0.0)
    return np.asarray(variance / n * (1.0 + lag) / (1.0 - lag) + repeated)


def _clipped(x: Floats, begins: Floats, ends: Floats, channel: Channel) -> npt.NDArray[np.bool_]:
    """Whether two samples in a row stand at a rail, in each window."""
    at_rail = (x >= channel.high) | (x <= channel.low)
    both = at_rail[1:] & at_rail[:-1]
    seen = np.concatenate(([0], np.cumsum(both)))
    low = np.ceil(begins).astype(np.int64)
    high = np.minimum(np.maximum(np.ceil(ends).astype(np.int64) - 1, low), len(both))
    return np.asarray(seen[high] > seen[low])


def _low(rms: Floats, scales: _Scales) -> npt.NDArray[np.bool_]:
    """Too little of the range for a comparison of meters, (c, w)."""
    span = scales.high - scales.low
    least = np.where(np.isfinite(span), LOW_OF_RANGE * span / 2.0, 0.0)
    least = np.maximum(least, LOW_OF_STEPS * scales.step)
    return np.asarray((rms < least) | (rms <= 0.0))
