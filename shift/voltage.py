"""Dips, swells and interruptions of a voltage, from its half-cycle RMS.

A dip begins with the first value below 90 % of the reference and ends with the first at or above
92 %; a swell mirrors that at 110 and 108 %; an interruption is a dip that falls below 5 %
(IEC 61000-4-30, usual thresholds, from memory, not read). The reference is the setup's declared
voltage, or else slides after the windows' RMS with a time constant of a minute, standing still
while something lasts.
"""

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

DIP, SWELL, INTERRUPTION, HYSTERESIS = 0.90, 1.10, 0.05, 0.02
SLIDE = 0.0033  # share of a new 10/12-cycle value in the sliding reference: about one minute


@dataclass(frozen=True, slots=True)
class Excursion:
    """A voltage outside its band. `worst` is the residual of a dip, the peak of a swell."""

    kind: str  # "dip" or "swell"; an interruption is known as one when `worst` says so
    start: float  # s
    worst: float  # V, half-cycle RMS
    reference: float  # V
    end: float | None = None  # s; None while it lasts

    @property
    def name(self) -> str:
        """What it turned out to be."""
        if self.kind == "dip" and self.worst < INTERRUPTION * self.reference:
            return "interruption"
        return self.kind


class Watcher:
    """Watches one voltage."""

    def __init__(self, declared: float | None = None) -> None:
        """Watch against a declared voltage [V], or a sliding reference."""
        self._declared = declared
        self._reference = declared or 0.0
        self._open: Excursion | None = None
        self._last_square: float | None = None
        self._last_end = -1.0

    @property
    def open(self) -> Excursion | None:
        """What lasts now."""
        return self._open

    def half_cycles(self, times: Floats, squares: Floats, rms: float) -> list[Excursion]:
        """Take half cycles in; give what began (without end) and what ended.

        Args:
            times: (k,) their ends [s].
            squares: (k,) mean squares [V^2].
            rms: of the windows that they fill [V], for the sliding reference.
        """
        if not len(times):
            return []
        joined = self._last_square is not None and abs(times[0] - self._last_end) < 2.0 * (
            times[1] - times[0] if len(times) > 1 else 0.02
        )
        before = self._last_square if joined else None
        chain = squares if before is None else np.concatenate(([before], squares))
        values = np.sqrt((chain[1:] + chain[:-1]) / 2.0)
        at = times if before is not None else times[1:]
        self._last_square, self._last_end = float(squares[-1]), float(times[-1])
        if self._reference <= 0.0:
            self._reference = float(np.median(values)) if len(values) else rms
        told = self.values(at, values)
        if self._open is None and not told and self._declared is None:
            self._reference += SLIDE * (rms - self._reference)
        return told

    def values(self, at: Floats, values: Floats) -> list[Excursion]:
        """The same with RMS values (k,) at times (k,) [s]."""
        told: list[Excursion] = []
        reference = self._reference
        if reference <= 0.0:
            return told
        share = values / reference
        k = 0
        while k < len(share):
            if self._open is None:
                out = np.flatnonzero((share[k:] < DIP) | (share[k:] > SWELL))
                if not len(out):
                    break
                k += int(out[0])
                kind = "dip" if share[k] < DIP else "swell"
                self._open = Excursion(kind, float(at[k]), float(values[k]), reference)
                told.append(self._open)
            opened = self._open
            dip = opened.kind == "dip"
            over = share[k:] >= DIP + HYSTERESIS if dip else share[k:] <= SWELL - HYSTERESIS
            end = int(np.argmax(over)) if over.any() else len(over)
            stretch = values[k : k + end]
            if len(stretch):
                extreme = float(stretch.min() if dip else stretch.max())
                worst = min(opened.worst, extreme) if dip else max(opened.worst, extreme)
                self._open = replace(opened, worst=worst)
            k += end
            if k < len(share):
                told.append(replace(self._open, end=float(at[k])))
                self._open = None
        return told

    def finish(self, now: float) -> list[Excursion]:
        """The stream ends at `now` [s]: what lasts is closed there."""
        opened, self._open = self._open, None
        return [] if opened is None else [replace(opened, end=now)]

    def gap(self) -> None:
        """Samples are missing: the next half cycle does not follow on the last."""
        self._last_square = None
