"""Summary: what a channel did over everything that was measured, in bounded memory."""

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from dsp.reading import Readings, comparable
from dsp.verdict import JUDGEMENTS, Judgement
from dsp.waveform import Channel


@dataclass(frozen=True, slots=True)
class Spread:
    """Least, mean and largest of a figure over windows; NaN until there is one."""

    low: float = math.nan
    high: float = math.nan
    total: float = 0.0
    total_square: float = 0.0
    count: int = 0

    @property
    def mean(self) -> float:
        """Arithmetic mean over windows."""
        return self.total / self.count if self.count else math.nan

    @property
    def root_mean_square(self) -> float:
        """Root of the mean square, how RMS values are aggregated (IEC 61000-4-30)."""
        return math.sqrt(self.total_square / self.count) if self.count else math.nan

    def with_values(self, values: npt.NDArray[np.float64]) -> "Spread":
        """The spread with more values (n,) in it; those that are not finite do not count."""
        values = values[np.isfinite(values)]
        if not len(values):
            return self
        low, high = float(values.min()), float(values.max())
        return Spread(
            low=low if self.count == 0 else min(low, self.low),
            high=high if self.count == 0 else max(high, self.high),
            total=self.total + float(values.sum()),
            total_square=self.total_square + float(np.dot(values, values)),
            count=self.count + len(values),
        )


@dataclass(frozen=True, slots=True)
class Summary:
    """One channel over the whole stream so far."""

    channel: Channel
    rms: Spread = Spread()
    crest_factor: Spread = Spread()
    thd_f: Spread = Spread()
    averaging_error: Spread = Spread()
    windows: int = 0
    windows_misleading: int = 0
    seconds_covered: float = 0.0
    seconds_lost: float = 0.0


def with_run(
    summary: Summary,
    readings: Readings,
    codes: npt.NDArray[np.int8],
    c: int,
    seconds_lost: float,
) -> Summary:
    """The summary of channel `c` with a run of windows added.

    Args:
        readings: the run.
        codes: (w, c) judgement on the averaging meter, positions in JUDGEMENTS.
        seconds_lost: of the whole stream so far.
    """
    misleading = codes[:, c] == JUDGEMENTS.index(Judgement.MISLEADS)
    return Summary(
        channel=summary.channel,
        rms=summary.rms.with_values(readings.rms[:, c]),
        crest_factor=summary.crest_factor.with_values(readings.crest_factor[:, c]),
        thd_f=summary.thd_f.with_values(readings.thd_f[:, c]),
        averaging_error=summary.averaging_error.with_values(
            readings.averaging_error[comparable(readings)[:, c], c]
        ),
        windows=summary.windows + len(readings),
        windows_misleading=summary.windows_misleading + int(np.count_nonzero(misleading)),
        seconds_covered=summary.seconds_covered + float(readings.duration.sum()),
        seconds_lost=seconds_lost,
    )
