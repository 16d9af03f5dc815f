"""Everything about a run of windows: amplitudes, harmonics, averaging error, uncertainties.

Uncertainties are combined as in the GUM (JCGM 100): scatter of the cycles (widened by their lag-1
correlation), the window's ends, quantisation, edges that fall between samples, calibration. The
averaging error compares two figures of the same samples, so the scale's uncertainty cancels in it.
"""

from collections.abc import Mapping, Sequence

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
    pad_left = max(0, MARGIN - (int(np.floor(windows.begins[0])) - windows.first))
    reach = windows.first + windows.samples.shape[1]
    pad_right = max(0, MARGIN + 1 - (reach - int(np.floor(windows.ends[-1]))))
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
    columns: dict[str, Floats] = {name: np.empty((count, c)) for name in _COLUMNS}
    u: dict[str, Floats] = {name: np.empty((count, c)) for name in _UNCERTAIN}
    flags = np.repeat(windows.flags[:, None], c, axis=1)
    jumps = np.zeros((count, c))
    end_error = np.nan_to_num(windows.u_frequency / windows.frequency, nan=0.0)
    for k, channel in enumerate(channels):
        found = measure_amplitudes(samples[k], begins, ends, parts, cycles > 0)
        figures, uncertain = _figures(found, lines[:, k], channel, end_error, ends - begins)
        for name, column in figures.items():
            columns[name][:, k] = column
        for name, column in uncertain.items():
            u[name][:, k] = column
        jumps[:, k] = found.jump_share
        clipped = _clipped(samples[k], begins, ends, channel, found)
        flags[:, k] |= np.where(clipped, int(Flag.CLIPPED), 0)
        flags[:, k] |= np.where(_low(figures["rms"], channel), int(Flag.LOW_SIGNAL), 0)
    nu = windows.frequency / windows.rate
    # A jump lies anywhere between its two samples (rectangular).
    between = 2.0 * np.pi / np.sqrt(12.0) * np.nan_to_num(nu)[:, None] * jumps
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


_COLUMNS = (
    "rms", "mean", "arv", "peak_max", "peak_min", "crest_factor", "form_factor", "fundamental",
    "thd_f", "averaging", "averaging_error", "firing_angle",
)  # fmt: skip
_UNCERTAIN = (
    "rms", "mean", "arv", "peak", "crest_factor", "form_factor", "fundamental", "thd_f",
    "averaging", "averaging_error", "firing_angle",
)  # fmt: skip


def _figures(
    found: Amplitudes,
    lines: npt.NDArray[np.complex128],
    channel: Channel,
    end_error: Floats,
    width: Floats,
) -> tuple[Mapping[str, Floats], Mapping[str, Floats]]:
    """The figures of one channel and their standard uncertainties, (w,) each."""
    square = np.maximum(found.mean_square.mean(1), 0.0)
    rms = np.sqrt(square)
    arv_ac = np.maximum(found.arv_ac.mean(1), 0.0)
    arv = np.maximum(found.arv, 0.0)
    averaging = SINE_FORM_FACTOR * arv_ac
    peak = np.maximum(np.abs(found.peak_max), np.abs(found.peak_min))
    live = rms > 0.0
    safe = np.where(live, rms, 1.0)
    error = np.where(live, averaging / safe - 1.0, np.nan)
    crest = np.where(live, peak / safe, np.nan)
    form = np.where(arv > 0.0, rms / np.where(arv > 0.0, arv, 1.0), np.nan)
    fundamental = np.abs(lines[:, 0])
    # A neutral with nothing but triplens, a dead channel: no fundamental to compare with.
    has = fundamental > NO_FUNDAMENTAL * safe * live
    power = np.nansum(np.abs(lines[:, 1:]) ** 2, axis=1)
    base = np.where(has, fundamental, 1.0)
    thd = np.where(has, np.sqrt(power) / base, np.nan)

    sigma = channel.step / np.sqrt(12.0)  # of one sample: quantisation, rectangular
    per_window = sigma / np.sqrt(width)
    per_part = per_window * np.sqrt(found.mean_square.shape[1])
    u_square = np.sqrt(
        _scatter(found.mean_square) ** 2
        + (end_error * square) ** 2
        + found.jump_square**2
        + (2.0 * rms * per_window) ** 2
        + _repeated(found.mean_square, 2.0 * rms * per_part) ** 2
        + sigma**4
    )
    u_rms_own = np.where(live, u_square / (2.0 * safe), sigma)
    u_rms = np.sqrt(
        u_rms_own**2
        + (channel.u_gain * rms) ** 2
        + np.where(live, found.mean / safe, 1.0) ** 2 * channel.u_offset**2
    )
    u_arv_own = np.sqrt(
        _scatter(found.arv_ac) ** 2
        + (end_error * arv) ** 2
        + found.jump_arv**2
        + per_window**2
        + _repeated(found.arv_ac, per_part) ** 2
    )
    u_arv = np.sqrt(u_arv_own**2 + (channel.u_gain * arv) ** 2 + channel.u_offset**2)
    # Scatter of the ratio itself: cycles that grow together leave it alone.
    ratio = (
        SINE_FORM_FACTOR
        * found.arv_ac
        / np.sqrt(np.where(found.mean_square > 0.0, found.mean_square, 1.0))
    )
    jump = np.abs(
        SINE_FORM_FACTOR * found.jump_arv / safe
        - (1.0 + np.nan_to_num(error)) * found.jump_square / (2.0 * safe**2)
    )
    u_error = np.sqrt(
        _scatter(ratio) ** 2
        + jump**2
        + (end_error * 0.5) ** 2
        + (per_window / safe) ** 2 * 2.0
        + _repeated(ratio, per_part / safe) ** 2
        + (sigma / safe) ** 4
        + (found.mean / safe**2) ** 2 * channel.u_offset**2
    )
    u_peak = np.sqrt(channel.step**2 / 12.0 + (channel.u_gain * peak) ** 2 + channel.u_offset**2)
    u_crest = np.sqrt((u_peak / safe) ** 2 + (np.nan_to_num(crest) * u_rms_own / safe) ** 2)
    noise = np.sqrt(2.0) * per_window
    u_fundamental = np.sqrt(
        noise**2 + (channel.u_gain * fundamental) ** 2 + (u_rms_own * (fundamental / safe)) ** 2
    )
    orders = np.maximum(np.isfinite(lines[:, 1:].real).sum(1), 1)
    # Noise adds to every line; where it outweighs the harmonics it lifts the THD itself.
    lifted = orders * (noise / base) ** 2
    u_thd = np.where(
        has,
        np.sqrt(
            lifted / np.sqrt(orders)
            + (np.nan_to_num(thd) * u_rms_own / safe) ** 2
            + found.jump_square / np.maximum(square, 1e-300) / width
        ),
        np.nan,
    )
    u_form = np.nan_to_num(form) * np.sqrt(
        (u_rms_own / safe) ** 2 + (u_arv_own / np.where(arv > 0.0, arv, 1.0)) ** 2
    )
    figures = {
        "rms": rms,
        "mean": found.mean,
        "arv": arv,
        "peak_max": found.peak_max,
        "peak_min": found.peak_min,
        "crest_factor": crest,
        "form_factor": form,
        "fundamental": np.where(np.isfinite(fundamental), fundamental, np.nan),
        "thd_f": thd,
        "averaging": averaging,
        "averaging_error": error,
    }
    uncertain = {
        "rms": u_rms,
        "mean": np.sqrt(
            per_window**2
            + channel.u_offset**2
            + (channel.u_gain * found.mean) ** 2
            + (end_error * rms) ** 2
        ),
        "arv": u_arv,
        "peak": u_peak,
        "crest_factor": np.where(live, u_crest, np.nan),
        "form_factor": np.where(np.isfinite(form), u_form, np.nan),
        "fundamental": u_fundamental,
        "thd_f": u_thd,
        "averaging": SINE_FORM_FACTOR * np.sqrt(u_arv_own**2 + (channel.u_gain * arv_ac) ** 2),
        "averaging_error": np.where(live, u_error, np.nan),
    }
    return figures, uncertain


def _scatter(parts: Floats) -> Floats:
    """Standard uncertainty of the mean of correlated parts (w, p); 0 for a single part."""
    n = parts.shape[1]
    if n < 2:
        return np.zeros(len(parts))
    rest = parts - parts.mean(1, keepdims=True)
    variance = (rest**2).sum(1) / (n - 1)
    lag = (rest[:, 1:] * rest[:, :-1]).sum(1) / np.maximum((rest**2).sum(1), 1e-300)
    lag = np.clip(lag, 0.0, 0.9)
    return np.asarray(np.sqrt(variance / n * (1.0 + lag) / (1.0 - lag)))


def _repeated(parts: Floats, expected: Floats) -> Floats:
    """What rounding errors that come back in every part leave in the mean of parts (w, p).

    Rounding should scatter the parts by `expected` (w,). Where they scatter by far less, sampling
    keeps step with a quiet wave: each part repeats the errors of the first and their mean is no
    better than one; and a mirrored half-cycle repeats them once more, which leaves half as many.
    Twice the variance found is held against it, as few parts tell it poorly.
    """
    if parts.shape[1] < 2:
        return np.zeros(len(parts))
    return np.asarray(np.sqrt(2.0 * np.maximum(expected**2 - 2.0 * parts.var(1, ddof=1), 0.0)))


def _clipped(
    x: Floats, begins: Floats, ends: Floats, channel: Channel, found: Amplitudes
) -> npt.NDArray[np.bool_]:
    """Two samples in a row at a rail."""
    touches = (found.peak_max >= channel.high) | (found.peak_min <= channel.low)
    if not touches.any():
        return touches
    at_rail = (x >= channel.high) | (x <= channel.low)
    both = at_rail[1:] & at_rail[:-1]
    seen = np.concatenate(([0], np.cumsum(both)))
    low = np.ceil(begins).astype(np.int64)
    high = np.minimum(np.maximum(np.ceil(ends).astype(np.int64) - 1, low), len(both))
    return np.asarray(seen[high] > seen[low])


def _low(rms: Floats, channel: Channel) -> npt.NDArray[np.bool_]:
    low = rms <= 0.0
    if channel.step > 0.0:
        low |= rms < LOW_OF_STEPS * channel.step
    span = channel.high - channel.low
    if np.isfinite(span):
        low |= rms < LOW_OF_RANGE * span / 2.0
    return np.asarray(low)
