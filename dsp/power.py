"""Power of voltage/current pairs (IEEE 1459 definitions, from memory, not read).

P is the mean of v i over whole cycles. When the current is sampled later than the voltage, each
harmonic's share is turned back by the delay before it is counted.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from dsp.edges import MARGIN, Ends
from dsp.reading import Readings
from dsp.waveform import Channel
from dsp.window import Windows

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Power:
    """Figures of one pair in one window. A figure that does not exist is NaN."""

    voltage: str  # channel names
    current: str
    start: float  # s on the sample clock
    duration: float  # s
    p: float  # active [W]
    s: float  # apparent [VA]
    pf: float  # p / s
    dpf: float  # fundamental power factor, cos of the fundamental's angle
    q1: float  # fundamental reactive, positive when the current lags [var]
    distortion: float  # SN = sqrt(S^2 - S1^2), non-fundamental apparent [VA]
    energy: float  # since the stream began [Wh]
    u_p: float  # standard uncertainty of p [W]


@dataclass(frozen=True, slots=True, eq=False)
class PowerColumns:
    """The same for w windows and k pairs, (w, k) each."""

    pairs: tuple[tuple[int, int], ...]  # (voltage, current) channel positions
    p: Floats
    s: Floats
    pf: Floats
    dpf: Floats
    q1: Floats
    distortion: Floats
    u_p: Floats


def measure_pairs(
    windows: Windows,
    readings: Readings,
    pairs: Sequence[tuple[int, int]],
    channels: Sequence[Channel],
) -> PowerColumns:
    """Power of every pair in every window of a run."""
    shape = (len(windows), len(pairs))
    names = ("p", "s", "pf", "dpf", "q1", "distortion", "u_p")
    columns = {name: np.full(shape, np.nan) for name in names}
    for k, (v, i) in enumerate(pairs):
        for name, column in _one(windows, readings, v, i, channels).items():
            columns[name][:, k] = column
    return PowerColumns(pairs=tuple(pairs), **columns)


def _one(
    windows: Windows, readings: Readings, v: int, i: int, channels: Sequence[Channel]
) -> dict[str, Floats]:
    low = max(0, MARGIN - (int(np.floor(windows.begins[0])) - windows.first))
    reach = windows.first + windows.samples.shape[1]
    high = max(0, MARGIN + 1 - (reach - int(np.floor(windows.ends[-1]))))
    product = windows.samples[v] * windows.samples[i]
    if low or high:
        product = np.pad(product, (low, high), mode="edge")
    positions = np.append(windows.begins, windows.ends[-1]) - (windows.first - low)
    p = Ends(positions).sums(product) / (windows.ends - windows.begins)
    phasor_v, phasor_i = readings.harmonics[:, v], readings.harmonics[:, i]
    cross = phasor_v * phasor_i.conj()
    cross[np.isnan(cross.real)] = 0.0
    late = channels[i].delay - channels[v].delay
    if late:
        order = np.arange(1, cross.shape[1] + 1)
        # Sampled `late` s later, the current's phasor is ahead by that much; turn it back.
        turn = np.exp(
            2j
            * np.pi
            * late
            * np.where(readings.frequency > 0.0, readings.frequency, 0.0)[:, None]
            * order
        )
        p = p + (cross * turn - cross).real.sum(1)
        cross = cross * turn
    s = readings.rms[:, v] * readings.rms[:, i]
    s1 = np.abs(cross[:, 0])
    p1, q1 = cross[:, 0].real, cross[:, 0].imag
    with_fundamental = s1 > 0.0
    u_v = readings.u["rms"][:, v] / np.where(readings.rms[:, v] > 0, readings.rms[:, v], 1.0)
    u_i = readings.u["rms"][:, i] / np.where(readings.rms[:, i] > 0, readings.rms[:, i], 1.0)
    return {
        "p": p,
        "s": s,
        "pf": np.where(s > 0.0, p / np.where(s > 0.0, s, 1.0), np.nan),
        "dpf": np.where(with_fundamental, p1 / np.where(with_fundamental, s1, 1.0), np.nan),
        "q1": np.where(with_fundamental, q1, np.nan),
        "distortion": np.where(with_fundamental, np.sqrt(np.maximum(s**2 - s1**2, 0.0)), np.nan),
        "u_p": s * np.hypot(u_v, u_i),
    }
