"""Window: a whole number of cycles whose ends fall between samples.

`Windows` holds a run of them in columns, which is how the arithmetic works; a `Window` is one
row of it. Positions are fractional set indices since the stream began.
"""

from dataclasses import dataclass
from enum import IntFlag, StrEnum

import numpy as np
import numpy.typing as npt


class Lock(StrEnum):
    """Whether the reference channel's fundamental carries the windows."""

    SEARCHING = "searching"
    LOCKED = "locked"
    HOLDING = "holding"  # lost a moment ago (a dip): the last frequency is kept for a while
    UNLOCKED = "unlocked"  # no fundamental: the window is a fixed time


class Flag(IntFlag):
    """What is to be said of a window or a reading beside its numbers."""

    NONE = 0
    CLIPPED = 1
    GAP = 2
    EDGE = 4  # fewer cycles than a full window, at an end of the data
    LOW_SIGNAL = 8
    UNLOCKED = 16

    def words(self) -> list[str]:
        """The flag names as records spell them, in a fixed order."""
        return [name for flag, name in _FLAG_NAMES if flag in self]


_FLAG_NAMES = (
    (Flag.CLIPPED, "clipped"),
    (Flag.GAP, "gap"),
    (Flag.EDGE, "edge"),
    (Flag.LOW_SIGNAL, "low-signal"),
    (Flag.UNLOCKED, "unlocked"),
)


@dataclass(frozen=True, slots=True, eq=False)
class Window:
    """One window over all channels."""

    samples: npt.NDArray[np.float64]  # (channels, n), read-only; covers begin..end with margins
    first: int  # set index of samples[:, 0]
    begin: float  # fractional set index
    end: float
    rate: float  # sets a second
    cycles: int  # 0 when unlocked
    frequency: float  # Hz; NaN when unlocked
    u_frequency: float  # Hz; NaN when unlocked
    lock: Lock
    flags: Flag


@dataclass(frozen=True, slots=True, eq=False)
class Windows:
    """Windows that lie in one contiguous stretch of samples, in columns of length w."""

    samples: npt.NDArray[np.float64]  # (channels, n), read-only; covers all windows with margins
    first: int  # set index of samples[:, 0]
    rate: float  # sets a second
    begins: npt.NDArray[np.float64]  # (w,) fractional set index since the stream began
    ends: npt.NDArray[np.float64]  # (w,)
    cycles: npt.NDArray[np.int64]  # (w,) 0 when unlocked
    frequency: npt.NDArray[np.float64]  # (w,) Hz, NaN when unlocked
    u_frequency: npt.NDArray[np.float64]  # (w,) Hz, NaN when unlocked
    locks: tuple[Lock, ...]  # (w,)
    flags: npt.NDArray[np.int64]  # (w,) Flag values

    def __post_init__(self) -> None:
        for column in (
            self.samples, self.begins, self.ends, self.cycles,
            self.frequency, self.u_frequency, self.flags,
        ):  # fmt: skip
            column.setflags(write=False)

    def __len__(self) -> int:
        return len(self.begins)

    def row(self, w: int) -> Window:
        """Window number `w` of this run, samples cut to it with a margin of 4 sets a side."""
        lo = max(0, int(self.begins[w]) - 4 - self.first)
        hi = min(self.samples.shape[1], int(self.ends[w]) + 5 - self.first)
        return Window(
            samples=self.samples[:, lo:hi],
            first=self.first + lo,
            begin=float(self.begins[w]),
            end=float(self.ends[w]),
            rate=self.rate,
            cycles=int(self.cycles[w]),
            frequency=float(self.frequency[w]),
            u_frequency=float(self.u_frequency[w]),
            lock=self.locks[w],
            flags=Flag(int(self.flags[w])),
        )
