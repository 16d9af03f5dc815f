"""Waveform: evenly spaced samples of every channel in their own units, gaps marked.

The arrow from `rig` to the measuring. A Waveform is contiguous inside; what is missing lies
before it, and `gap_before` says whether anything is.
"""

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt


class Kind(StrEnum):
    """What a channel measures; decides which card, limit and pair it can belong to."""

    VOLTAGE = "voltage"
    CURRENT = "current"
    OTHER = "other"


@dataclass(frozen=True, slots=True)
class Channel:
    """One input as the site's setup describes it.

    `step`, `low`, `high` and `u_offset` are in `unit`; `u_gain` is a fraction; `delay` in seconds.
    """

    name: str
    unit: str
    kind: Kind = Kind.OTHER
    step: float = 0.0  # size of one converter code; 0 when the samples are not coded
    low: float = float("-inf")  # rails: a sample at or beyond one may be clipped
    high: float = float("inf")
    u_gain: float = 0.0  # relative standard uncertainty of the whole scale
    u_offset: float = 0.0  # standard uncertainty of the zero
    delay: float = 0.0  # how much later than channel 0 this one is sampled


@dataclass(frozen=True, slots=True, eq=False)
class Waveform:
    """A contiguous run of samples of all channels.

    `start` counts sets (one sample of every channel) since the stream began, the lost ones too.
    """

    samples: npt.NDArray[np.float64]  # (channels, n), read-only, in each channel's unit
    rate: float  # sets a second, the best estimate at the time
    start: int
    gap_before: bool = False  # something is missing between the previous Waveform and this one
    lost_before: int | None = 0  # how many sets; None when the format cannot tell
    arrived: float = float("nan")  # host monotonic time of the last sample [s]

    def __post_init__(self) -> None:
        self.samples.setflags(write=False)

    @property
    def stop(self) -> int:
        """Index just past the last set."""
        return self.start + int(self.samples.shape[1])
