"""The loss ledger of a counted stream: which sets came, which are missing, and why.

Per boot, received + declared lost = last index + count - first index seen. The logger counts
every trigger of its converter, discarded ones too, so a gap in the index is an exact loss. Index,
sequence and tick wrap; here they are unwrapped into integers without bound.

A reboot is another boot id, an index or sequence that goes backward, or a logger's clock that
disagrees with the index. With a constant boot id a reboot can still hide in a gap: that is why
the format asks for a stored boot counter.
"""

import math
from collections import deque
from dataclasses import dataclass

from acquisition.wire.crestwire_frame import DEFAULT_TICK_HZ

INDEX_SPAN = 1 << 32
SEQUENCE_SPAN = 1 << 16
# A clock off by more than 1 % of the gap and 200 us is another boot's: far above what an
# oscillator or a late time stamp does.
TICK_SLACK = 0.01
TICK_SLACK_S = 200e-6
RECENT = 64  # frames remembered to know a repeated one
BASELINE = 1 << 16  # sets after which the ticks per set are learned afresh


@dataclass(frozen=True, slots=True)
class Placed:
    """Where a frame stands in the stream."""

    lost: int  # sets missing since the frame before
    discarded: int  # of these, discarded in the logger by its own count
    reboot: bool
    tick: int  # unwrapped within the boot


class Ledger:
    """Places frames and counts what is missing."""

    def __init__(self) -> None:
        self.boot: int | None = None  # the logger's boot id
        self.boots = 0  # number of the boot now running: 0, 1, …
        self.sequence = 0  # expected next
        self.index = 0  # expected next, as the logger counts: wraps
        self.position = 0  # the same, counted from the stream's first set: never wraps
        self.lost = 0
        self.discarded = 0
        self.duplicates = 0
        self.reboots = 0
        self.tail_unknown = 0
        self.constant_boot_id = False  # a reboot was seen under the same id
        self.tick_hz = DEFAULT_TICK_HZ
        # Sequence and CRC. With sequence and clock alone, a board that boots again under the same
        # id would look like its own first frames repeated; the noise in its samples tells.
        self.recent: deque[tuple[int, bytes]] = deque(maxlen=RECENT)
        self._declared_rate: float | None = None
        self._tick = 0  # unwrapped, of the set at _tick_position
        self._tick_position = 0
        self._ticks_per_set: float | None = None
        self._anchor: tuple[int, int] = (0, 0)  # position and tick the slope is taken from
        self._fresh_anchor = False
        self._heard = math.nan

    def declare(self, rate: float | None, tick_hz: int | None) -> None:
        """What the logger says of its clocks; used until its frames have shown it."""
        if tick_hz:
            self.tick_hz = tick_hz
        if rate and rate != self._declared_rate:
            if self._declared_rate is not None:
                self._ticks_per_set = None
                self._anchor = (self._tick_position, self._tick)
                self._fresh_anchor = True
            self._declared_rate = rate

    def place(
        self, boot: int, sequence: int, index: int, tick: int, crc: bytes, arrived: float
    ) -> Placed | None:
        """Enter a good frame of any kind; None when it is a repeated one."""
        if boot == self.boot and (sequence, crc) in self.recent:
            self.duplicates += 1
            return None
        placed = self._place(boot, sequence, index, tick, arrived)
        self.recent.append((sequence, crc))
        return placed

    def _place(self, boot: int, sequence: int, index: int, tick: int, arrived: float) -> Placed:
        if self.boot is None:
            self.boot = boot
            return self._begin_boot(sequence, index, tick, arrived, lost=0, reboot=False)
        if boot == self.boot:
            missed = (sequence - self.sequence) % SEQUENCE_SPAN
            gap = (index - self.index) % INDEX_SPAN
            if missed == 0 and gap == 0:
                return self._follow(sequence, tick, arrived, 0, 0)
            backward = gap >= INDEX_SPAN // 2 or missed >= SEQUENCE_SPAN // 2
            if not backward and not self._clock_disagrees(gap, tick):
                # No frame is missing, yet sets are: the logger discarded them itself.
                return self._follow(sequence, tick, arrived, gap, gap if missed == 0 else 0)
            self.constant_boot_id = True
        return self._reboot(boot, sequence, index, tick, arrived)

    def advance(self, sets: int, last_sets: int, frames: int, tick: int) -> None:
        """Enter the sets of the frame just placed and of those that followed it without a break.

        Args:
            sets: all of them.
            last_sets: those of the last frame.
            frames: how many followed the placed one.
            tick: the logger's clock at the last frame's first set.
        """
        self.index = (self.index + sets) % INDEX_SPAN
        self.position += sets
        self.sequence = (self.sequence + frames) % SEQUENCE_SPAN
        self._learn(self.position - last_sets, tick)

    def tail_bound(self, arrived: float) -> int:
        """At most this many sets can have passed since the last frame was heard."""
        silence = arrived - self._heard
        rate = self._rate()
        if rate is None or not math.isfinite(silence) or silence <= 0.0:
            return 0
        return math.ceil(rate * silence)

    def _rate(self) -> float | None:
        if self._ticks_per_set:
            return self.tick_hz / self._ticks_per_set
        return self._declared_rate

    def _clock_disagrees(self, gap: int, tick: int) -> bool:
        per_set = self._ticks_per_set
        if per_set is None:
            if self._declared_rate is None:
                return False
            per_set = self.tick_hz / self._declared_rate
        expected = (self.position + gap - self._tick_position) * per_set
        slack = TICK_SLACK * expected + TICK_SLACK_S * self.tick_hz
        if slack >= INDEX_SPAN / 4:
            return False  # the clock has wrapped too often to tell
        return abs(_signed(tick - self._tick - round(expected))) > slack

    def _follow(
        self, sequence: int, tick: int, arrived: float, lost: int, discarded: int
    ) -> Placed:
        self.lost += lost
        self.discarded += discarded
        self.index = (self.index + lost) % INDEX_SPAN
        self.position += lost
        self.sequence = (sequence + 1) % SEQUENCE_SPAN
        self._heard = arrived
        self._unwrap(tick, self.position)
        return Placed(lost, discarded, False, self._tick)

    def _unwrap(self, tick: int, position: int) -> None:
        """Move the unwrapped clock to a set, over any number of its wraps."""
        sets = position - self._tick_position
        expected = round(sets * self._ticks_per_set) if self._ticks_per_set else 0
        self._tick += expected + _signed(tick - self._tick - expected)
        self._tick_position = position

    def _learn(self, position: int, tick: int) -> None:
        """How many ticks a set takes, from the logger's clock at a set that followed."""
        self._unwrap(tick, position)
        sets = position - self._anchor[0]
        if sets <= 0:
            return
        if self._fresh_anchor or self._ticks_per_set is None or sets >= BASELINE // 16:
            self._ticks_per_set = max((self._tick - self._anchor[1]) / sets, 0.0)
        if sets >= BASELINE:
            self._anchor = (position, self._tick)
            self._fresh_anchor = False

    def _reboot(self, boot: int, sequence: int, index: int, tick: int, arrived: float) -> Placed:
        self.tail_unknown += self.tail_bound(arrived)
        self.reboots += 1
        self.boots += 1
        self.boot = boot
        self.lost += index
        self.position += index  # a boot counts from 0, so these were sampled and never came
        return self._begin_boot(sequence, index, tick, arrived, lost=index, reboot=True)

    def _begin_boot(
        self, sequence: int, index: int, tick: int, arrived: float, *, lost: int, reboot: bool
    ) -> Placed:
        self.recent.clear()
        self.sequence = (sequence + 1) % SEQUENCE_SPAN
        self.index = index
        self._tick = tick
        self._tick_position = self.position
        self._anchor = (self.position, tick)
        self._fresh_anchor = self._ticks_per_set is None
        self._heard = arrived
        return Placed(lost, 0, reboot, tick)


def _signed(difference: int) -> int:
    """A difference of two 32-bit counts, taken the short way round."""
    return (difference + INDEX_SPAN // 2) % INDEX_SPAN - INDEX_SPAN // 2
