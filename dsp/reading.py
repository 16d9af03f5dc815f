"""Reading: everything measured on one channel in one window, each figure with its uncertainty.

`Readings` holds the same in columns over windows and channels, so that hours are measured
without a Python step per window; a `Reading` is one cell of it. A figure that does not exist
(crest factor of 0 V, THD without a fundamental) is NaN here and null in a record.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from dsp.window import Flag, Lock

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Reading:
    """Figures of one channel in one window. Amplitudes in the channel's unit, ratios as fractions.

    `averaging` is an AC-coupled mean-responding meter scaled for a sine; `averaging_error` its
    error against `rms`. `u` maps a field's name to its standard uncertainty in the field's unit.
    """

    start: float  # s on the sample clock, from the stream's first set
    duration: float  # s
    cycles: int  # 0 when unlocked
    frequency: float  # Hz
    lock: Lock
    rms: float
    mean: float
    arv: float
    peak_max: float
    peak_min: float
    crest_factor: float
    form_factor: float
    fundamental: float  # RMS of the fundamental
    thd_f: float  # fraction
    harmonics: npt.NDArray[np.complex128]  # (orders,) RMS phasors from order 1, of the window start
    averaging: float
    averaging_error: float  # fraction
    firing_angle: float  # rad; NaN unless the wave is phase-cut
    u: Mapping[str, float]
    flags: Flag

    @property
    def peak(self) -> float:
        """The larger of the two extremes, without its sign."""
        return max(abs(self.peak_max), abs(self.peak_min))


@dataclass(frozen=True, slots=True, eq=False)
class Readings:
    """Readings of w windows on c channels, in columns."""

    start: Floats  # (w,)
    duration: Floats  # (w,)
    cycles: npt.NDArray[np.int64]  # (w,)
    frequency: Floats  # (w,)
    locks: tuple[Lock, ...]  # (w,)
    rms: Floats  # (w, c), as are all below unless they say otherwise
    mean: Floats
    arv: Floats
    peak_max: Floats
    peak_min: Floats
    crest_factor: Floats
    form_factor: Floats
    fundamental: Floats
    thd_f: Floats
    harmonics: npt.NDArray[np.complex128]  # (w, c, orders), NaN where an order is out of reach
    averaging: Floats
    averaging_error: Floats
    firing_angle: Floats
    u: Mapping[str, Floats]  # each (w, c)
    flags: npt.NDArray[np.int64]  # (w, c)

    def __len__(self) -> int:
        return len(self.start)

    def cell(self, w: int, c: int) -> Reading:
        """The Reading of window `w` on channel `c`."""
        harmonics = self.harmonics[w, c]
        harmonics = harmonics[: int(np.count_nonzero(np.isfinite(harmonics.real)))]
        return Reading(
            start=float(self.start[w]),
            duration=float(self.duration[w]),
            cycles=int(self.cycles[w]),
            frequency=float(self.frequency[w]),
            lock=self.locks[w],
            rms=float(self.rms[w, c]),
            mean=float(self.mean[w, c]),
            arv=float(self.arv[w, c]),
            peak_max=float(self.peak_max[w, c]),
            peak_min=float(self.peak_min[w, c]),
            crest_factor=float(self.crest_factor[w, c]),
            form_factor=float(self.form_factor[w, c]),
            fundamental=float(self.fundamental[w, c]),
            thd_f=float(self.thd_f[w, c]),
            harmonics=harmonics,
            averaging=float(self.averaging[w, c]),
            averaging_error=float(self.averaging_error[w, c]),
            firing_angle=float(self.firing_angle[w, c]),
            u={name: float(column[w, c]) for name, column in self.u.items()},
            flags=Flag(int(self.flags[w, c])),
        )


def comparable(readings: Readings) -> npt.NDArray[np.bool_]:
    """(w, c): where a comparison of meters says something.

    Not on a signal too small for its converter, and not on a scrap of less than a cycle.
    """
    scrap = int(Flag.EDGE | Flag.UNLOCKED)
    flags = readings.flags
    return np.asarray(((flags & int(Flag.LOW_SIGNAL)) == 0) & ((flags & scrap) != scrap))
