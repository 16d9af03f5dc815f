"""Batch: a run of measured windows, what every card makes of them, and what happened in them."""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from dsp.meters import MeterCard
from dsp.power import Power, PowerColumns
from dsp.reading import Readings
from dsp.verdict import JUDGEMENTS, Verdict
from dsp.waveform import Channel
from dsp.window import Windows
from shift.event import Event


@dataclass(frozen=True, slots=True, eq=False)
class Shown:
    """What one meter card shows over a run of windows, (windows, channels) each."""

    card: MeterCard
    reading: npt.NDArray[np.float64]
    error: npt.NDArray[np.float64]
    u_error: npt.NDArray[np.float64]
    codes: npt.NDArray[np.int8]  # positions in JUDGEMENTS


@dataclass(frozen=True, slots=True, eq=False)
class Batch:
    """A run of measured windows and what happened in them."""

    channels: tuple[Channel, ...]
    windows: Windows
    readings: Readings
    shown: tuple[Shown, ...]
    powers: PowerColumns
    energy: npt.NDArray[np.float64]  # (windows, pairs) Wh since the stream began
    events: tuple[Event, ...]

    def verdicts(self, w: int, c: int) -> tuple[Verdict, ...]:
        """What every card in force says of window `w` on channel `c`."""
        return tuple(
            Verdict(
                card=shown.card.name,
                reading=float(shown.reading[w, c]),
                error=float(shown.error[w, c]),
                u_error=float(shown.u_error[w, c]),
                judgement=JUDGEMENTS[int(shown.codes[w, c])],
            )
            for shown in self.shown
        )

    def pairs(self, w: int) -> tuple[Power, ...]:
        """Power of every pair in window `w`."""
        columns = self.powers
        return tuple(
            Power(
                voltage=self.channels[v].name,
                current=self.channels[i].name,
                start=float(self.readings.start[w]),
                duration=float(self.readings.duration[w]),
                p=float(columns.p[w, k]),
                s=float(columns.s[w, k]),
                pf=float(columns.pf[w, k]),
                dpf=float(columns.dpf[w, k]),
                q1=float(columns.q1[w, k]),
                distortion=float(columns.distortion[w, k]),
                energy=float(self.energy[w, k]),
                u_p=float(columns.u_p[w, k]),
            )
            for k, (v, i) in enumerate(columns.pairs)
        )
