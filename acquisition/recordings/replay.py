"""A recording replayed in real time: the same Blocks that `measure` reads, handed out when due.

It stands where a reader stands for a live source, but needs no thread: `take` reads ahead only
as far as the time that has passed.
"""

import time
from collections.abc import Callable, Generator
from dataclasses import replace

import numpy as np

from acquisition.accounting import Tally
from acquisition.block import Block
from acquisition.clock import ClockEstimate
from acquisition.errors import RecordingError
from acquisition.recordings.recording import Recording
from acquisition.status import LinkState, ReaderStatus

SLICE = 0.1  # s of recording handed out at a time, so that a screen moves evenly


class Replay:
    """Hands a recording out at `speed` times real time."""

    def __init__(
        self,
        recording: Recording,
        speed: float = 1.0,
        now: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        self._recording = recording
        self._speed = speed
        self._now = now
        self._sleep = sleep
        self._slices = self._cut()
        self._next: Block | None = None
        self._started: float | None = None
        rate = recording.info.rate
        assert rate is not None  # every opened recording has one
        self._rate = rate
        self._first_index: int | None = None
        self.damage: RecordingError | None = None
        self.status = ReaderStatus(
            state=LinkState.LIVE,
            link=recording.path.name,
            info=recording.info,
            clock=ClockEstimate(rate, 0.0, 0.0, "declared"),
        )

    def take(self, timeout: float) -> list[Block]:
        """Blocks that are due; waits at most `timeout` s for one."""
        if self._started is None:
            self._started = self._now()
        taken: list[Block] = []
        deadline = self._now() + timeout
        while True:
            if self._next is None:
                self._next = next(self._slices, None)
            if self._next is None:
                self.status = replace(self.status, state=LinkState.FINISHED)
                return taken
            if self._first_index is None:
                self._first_index = self._next.index
            sets = self._next.index + self._next.sets - self._first_index
            due = self._started + sets / self._rate / self._speed
            now = self._now()
            if due > now:
                if taken or due > deadline:
                    if not taken:
                        self._sleep(max(0.0, deadline - now))
                    return taken
                self._sleep(due - now)
            taken.append(self._next)
            self._count(self._next)
            self._next = None

    def stop(self) -> None:
        """Close the file."""
        self._slices.close()
        self._recording.close()

    def _cut(self) -> Generator[Block, None, None]:
        per_slice = max(1, round(SLICE * (self._recording.info.rate or 1.0)))
        try:
            for block in self._recording.blocks():
                for at in range(0, block.sets, per_slice):
                    yield replace(
                        block,
                        codes=block.codes[:, at : at + per_slice],
                        index=block.index + at,
                        lost_before=block.lost_before if at == 0 else 0,
                        gap_before=block.gap_before if at == 0 else False,
                        arrived=float("nan"),
                    )
        except RecordingError as error:
            self.damage = error

    def _count(self, block: Block) -> None:
        tally: Tally = self.status.tally
        lost = tally.lost
        if lost is not None:
            lost = None if block.lost_before is None else lost + block.lost_before
        counted = replace(tally, received=tally.received + block.sets, lost=lost)
        problem = str(self.damage) if self.damage is not None else ""
        advice = tuple(getattr(self.damage, "__notes__", ()))
        self.status = replace(
            self.status,
            tally=counted,
            problem=problem,
            advice=advice,
            bytes_received=self.status.bytes_received + int(np.asarray(block.codes).nbytes),
        )
