"""Meter cards: how one kind of instrument turns a waveform into a reading.

Generic kinds, never a maker's models. A card's error is against the true RMS, AC and DC together:
what an AC-coupled meter does not see is part of its error.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt

from dsp.measure import SINE_FORM_FACTOR
from dsp.reading import Readings
from dsp.waveform import Channel
from dsp.window import Windows

Floats = npt.NDArray[np.float64]


class Response(StrEnum):
    """What the instrument's movement or converter follows."""

    MEAN = "mean"  # average of the rectified wave, scaled for a sine
    PEAK = "peak"  # largest value, scaled for a sine
    RMS = "rms"  # true RMS, within a crest factor and a bandwidth


class Coupling(StrEnum):
    """Whether DC reaches it."""

    AC = "ac"
    DC = "dc"


@dataclass(frozen=True, slots=True)
class MeterCard:
    """One kind of instrument."""

    name: str
    response: Response
    coupling: Coupling = Coupling.AC
    crest_factor_limit: float | None = None  # at the RMS that fills its range; RMS response only
    bandwidth_hz: float | None = None  # of a one-pole roll-off; RMS response only
    full_range: float | None = None  # RMS that fills the range; None: the reading fills it
    accuracy_pct: float = 0.0  # of reading, limits as a data sheet states them

    @property
    def u_accuracy(self) -> float:
        """Relative standard uncertainty of the instrument itself (rectangular limits)."""
        return self.accuracy_pct / 100.0 / float(np.sqrt(3.0))


# The AC-coupled mean-responding meter comes first: verdicts and sentences are about it. Crest
# factor 3 and these bandwidths are what data sheets of the kinds commonly state (common practice,
# no source).
BUILT_IN: tuple[MeterCard, ...] = (
    MeterCard("averaging", Response.MEAN, Coupling.AC),
    MeterCard("averaging DC-coupled", Response.MEAN, Coupling.DC),
    MeterCard("peak-responding", Response.PEAK, Coupling.AC),
    MeterCard("true RMS, crest factor 3", Response.RMS, Coupling.AC, crest_factor_limit=3.0),
    MeterCard("true RMS, 1 kHz", Response.RMS, Coupling.AC, bandwidth_hz=1000.0),
)


def show(
    card: MeterCard, windows: Windows, readings: Readings, channels: Sequence[Channel]
) -> tuple[Floats, Floats, Floats]:
    """What the card would show.

    Args:
        card: the kind of instrument.
        windows, readings: a run of windows and what was measured in them.
        channels: one a column.
    Returns:
        reading (w, c) in the channel's unit, error against true RMS (w, c) as a fraction, and its
        standard uncertainty (w, c). NaN where there is nothing to compare.
    """
    rms = readings.rms
    live = rms > 0.0
    safe = np.where(live, rms, 1.0)
    u_own = readings.u["averaging_error"]
    if card.response is Response.MEAN:
        if card.coupling is Coupling.AC:
            reading = readings.averaging
        else:
            reading = SINE_FORM_FACTOR * readings.arv
        u_error = u_own
    elif card.response is Response.PEAK:
        high, low = readings.peak_max, readings.peak_min
        if card.coupling is Coupling.AC:
            high, low = high - readings.mean, low - readings.mean
        reading = np.maximum(np.abs(high), np.abs(low)) / np.sqrt(2.0)
        steps = np.array([c.step for c in channels]) / np.sqrt(12.0)
        u_error = np.hypot(u_own, steps / np.sqrt(2.0) / safe)
    else:
        reading = _limited_rms(card, windows, readings)
        u_error = u_own
    error = np.where(live, reading / safe - 1.0, np.nan)
    u_error = np.hypot(np.where(live, u_error, np.nan), card.u_accuracy)
    return reading, error, u_error


def _limited_rms(card: MeterCard, windows: Windows, readings: Readings) -> Floats:
    """True RMS as an instrument with its limits sees it."""
    square = readings.rms**2
    if card.coupling is Coupling.AC:
        square = np.maximum(square - readings.mean**2, 0.0)
    if card.bandwidth_hz is not None:
        square = square - _rolled_off(card.bandwidth_hz, readings, square)
    if card.crest_factor_limit is not None:
        square = square - _cut_off(card, windows, readings)
    return np.asarray(np.sqrt(np.maximum(square, 0.0)))


def _rolled_off(bandwidth: float, readings: Readings, square: Floats) -> Floats:
    """Mean square lost above the bandwidth: each harmonic by one pole, the rest as the last."""
    known = np.isfinite(readings.harmonics.real)
    power = np.where(known, np.abs(readings.harmonics), 0.0) ** 2
    order = np.arange(1, power.shape[2] + 1)
    hertz = np.where(readings.frequency > 0.0, readings.frequency, 0.0)[:, None] * order
    lost = 1.0 - 1.0 / (1.0 + (hertz / bandwidth) ** 2)
    measured = known.sum(axis=2)
    top = np.take_along_axis(lost, np.maximum(measured - 1, 0), axis=1)
    rest = np.maximum(square - power.sum(2), 0.0)
    return np.asarray((power * lost[:, None, :]).sum(2) + np.where(measured > 0, rest * top, 0.0))


def _cut_off(card: MeterCard, windows: Windows, readings: Readings) -> Floats:
    """Mean square lost where the wave exceeds the crest factor limit."""
    assert card.crest_factor_limit is not None
    full = np.full_like(readings.rms, card.full_range or np.nan)
    ac = np.sqrt(np.maximum(readings.rms**2 - readings.mean**2, 0.0))
    ceiling = card.crest_factor_limit * (ac if card.full_range is None else full)
    shift = readings.mean if card.coupling is Coupling.AC else np.zeros_like(readings.mean)
    peak = np.maximum(np.abs(readings.peak_max - shift), np.abs(readings.peak_min - shift))
    lost = np.zeros_like(readings.rms)
    over = (peak > ceiling) & (ceiling > 0.0)
    low = np.maximum(np.ceil(windows.begins).astype(np.int64) - windows.first, 0)
    stop = min(int(np.ceil(windows.ends[-1])) - windows.first, windows.samples.shape[1])
    stop = max(stop, int(low[-1]) + 1)
    lengths = np.diff(low, append=stop)
    for c in np.flatnonzero(over.any(axis=0)):
        z = np.abs(windows.samples[c, low[0] : stop] - np.repeat(shift[:, c], lengths))
        top = np.repeat(np.where(over[:, c], ceiling[:, c], np.inf), lengths)
        beyond = np.where(z > top, z, 0.0) ** 2 - np.where(z > top, top, 0.0) ** 2
        lost[:, c] = np.add.reduceat(beyond, low - low[0]) / lengths
    return lost
