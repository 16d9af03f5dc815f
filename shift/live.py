"""A live watch: runs the engine over what a reader hands out and publishes Snapshots.

`batches` runs in the caller's thread and yields what was measured (for pipes and logs); `start`
runs the same loop on a thread of its own for the screen. Neither ever waits for a screen.
"""

import threading
import time
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np

from acquisition.block import Block
from acquisition.clock import ClockEstimate
from acquisition.status import LinkState, ReaderStatus
from acquisition.stream import StreamInfo
from dsp.meters import MeterCard
from dsp.verdict import JUDGEMENTS, Judgement
from dsp.window import Window
from rig.channels import advice
from rig.setup import Setup
from rig.zero import ENOUGH, needs_zero, with_zero
from shift.batch import Batch
from shift.engine import Engine
from shift.event import Event
from shift.snapshot import ChannelView, Snapshot, Stage, Trend
from shift.summary import Summary, with_run

TREND_POINTS = 1500  # five minutes of 0.2 s windows: what Now draws
EVENTS_KEPT = 200
# A stream that tells no rate is listened to until its rate is known this well, or this long;
# 2e-4 of the rate moves an RMS by nothing and a frequency by 10 mHz, and it keeps improving.
RATE_ENOUGH = 2e-4
RATE_PATIENCE = 6.0  # s
# Blocks of a few ms are let gather this long: measuring them one by one costs twice as much, and
# nobody sees 40 ms.
GATHER = 0.04  # s
TAKE_WAIT = 0.1  # s, also how soon a stop is noticed


class BlockSource(Protocol):
    """What a live watch needs of a reader or a replayed recording."""

    @property
    def status(self) -> ReaderStatus:
        """The latest whole state."""
        ...

    def take(self, timeout: float) -> list[Block]:
        """Blocks that have come; waits at most `timeout` s for one."""
        ...


@dataclass(frozen=True, slots=True)
class WatchPlan:
    """What is watched and how."""

    source: str  # as named, cleaned
    setup: Setup
    cards: tuple[MeterCard, ...]
    rate: float | None = None  # sets a second, when the person said so
    setup_name: str = ""
    speed: float = 1.0  # how many times real time a simulated logger runs; scales its arrivals


class Live:
    """One watch."""

    def __init__(self, blocks: BlockSource, plan: WatchPlan, gather: float = GATHER) -> None:
        self._blocks = blocks
        self._gather = gather
        self._plan = plan
        self._engine: Engine | None = None
        self._rate: float | None = None
        self._waiting: list[Block] = []  # until the rate is known
        self._first_block: float | None = None
        self._stopping = False
        self._stopped: float | None = None  # when the source went quiet, host's clock
        self._thread: threading.Thread | None = None
        self._trends: list[deque[tuple[float, float]]] = []
        self._views: tuple[ChannelView, ...] = ()
        self._window: Window | None = None
        self._events: deque[Event] = deque(maxlen=EVENTS_KEPT)
        self._last_batch: Batch | None = None
        self.info: StreamInfo | None = None  # with the zeros that had to be assumed
        self.summaries: tuple[Summary, ...] = ()
        self.failure: Exception | None = None
        self.snapshot = Snapshot(
            source=plan.source,
            stage=Stage.STARTING,
            words="Waiting for the first bytes.",
            stream=blocks.status,
            limit=plan.setup.limit,
            setup_name=plan.setup_name,
        )

    @property
    def engine(self) -> Engine | None:
        """The engine, once the format and rate are known."""
        return self._engine

    @property
    def rate(self) -> float | None:
        """Sets a second as used for measuring now."""
        return self._rate

    def start(self, on_end: Callable[[], None] | None = None) -> None:
        """Run on a thread of its own."""
        self._thread = threading.Thread(
            target=self._run, args=(on_end,), name="engine", daemon=True
        )
        self._thread.start()

    def stop(self) -> None:
        """Ask the loop to end and, when it has its own thread, wait for it."""
        self._stopping = True
        if self._thread is not None:
            self._thread.join(timeout=5.0)

    def batches(self, until: Callable[[], bool] = lambda: False) -> Iterator[Batch]:
        """Measure until the source ends, `stop` is called or `until` says so; yields Batches.

        Raises:
            SetupError: the setup does not fit the stream.
        """
        while not self._stopping and not until():
            status = self._blocks.status
            if self._gather:
                time.sleep(self._gather)
            fresh = self._blocks.take(TAKE_WAIT)
            yield from self._notice(status)
            yield from self._absorb(fresh, status)
            self._publish()
            if not fresh and status.state in (LinkState.FINISHED, LinkState.FAILED):
                break
        if self._engine is None and self._waiting and self._settle_rate(patience=0.0):
            yield from self._absorb([], self._blocks.status)
        if self._engine is not None:
            for batch in self._engine.finish():
                self._remember(batch)
                yield batch
        self._publish()

    def _run(self, on_end: Callable[[], None] | None) -> None:
        try:
            for _ in self.batches():
                pass
        except Exception as error:  # told by the command after the screen has closed
            self.failure = error
            self.snapshot = replace(
                self.snapshot,
                stage=Stage.FAILED,
                words=str(error),
                advice=tuple(getattr(error, "__notes__", ())),
                number=self.snapshot.number + 1,
            )
        if on_end is not None:
            on_end()

    def _notice(self, status: ReaderStatus) -> Iterator[Batch]:
        """A source that stops, and one that comes back, are events."""
        if self._engine is None:
            return
        batch: Batch | None = None
        if status.state in (LinkState.GONE, LinkState.QUIET) and self._stopped is None:
            self._stopped = time.monotonic()
            batch = self._engine.stream_stops(self._stage(status)[1])
        elif status.state is LinkState.LIVE and self._stopped is not None:
            batch = self._engine.stream_returns(time.monotonic() - self._stopped)
            self._stopped = None
        if batch is not None:
            self._remember(batch)
            yield batch

    def _absorb(self, fresh: Sequence[Block], status: ReaderStatus) -> Iterator[Batch]:
        if self._engine is None:
            self._waiting += fresh
            if fresh and self._first_block is None:
                self._first_block = time.monotonic()
            if not self._waiting or not self._settle_rate(RATE_PATIENCE):
                return
            fresh, self._waiting = self._waiting, []
        else:
            self._settle_rate(RATE_PATIENCE)
        assert self._engine is not None
        assert self._rate is not None
        for block in fresh:
            for batch in self._engine.feed(block, self._rate):
                self._remember(batch)
                yield batch

    def _settle_rate(self, patience: float) -> bool:
        """Choose the rate to measure with; True once there is one and the engine stands."""
        status = self._blocks.status
        info = status.info
        if info is None:
            return False
        rate = self._best_rate(info.rate, info.rate_tolerance_ppm, status.clock, patience)
        if rate is None:
            return False
        self._rate = rate
        if self._engine is None:
            if needs_zero(self._plan.setup, info):
                if patience and sum(b.sets for b in self._waiting) < ENOUGH * rate:
                    return False
                codes = np.concatenate([block.codes for block in self._waiting], axis=1)
                info = with_zero(self._plan.setup, info, codes)
            self._engine = Engine(self._plan.setup, info, self._plan.cards)
            self.info = info
            self.summaries = tuple(Summary(c) for c in self._engine.channels)
            self._trends = [deque(maxlen=TREND_POINTS) for _ in self._engine.channels]
            self._views = tuple(
                ChannelView(c, None, (), Trend(np.empty(0), np.empty(0)))
                for c in self._engine.channels
            )
        return True

    def _best_rate(
        self,
        declared: float | None,
        tolerance_ppm: float | None,
        clock: ClockEstimate | None,
        patience: float,
    ) -> float | None:
        """Given beats measured; measured beats declared once it is the surer of the two."""
        given = self._plan.rate or self._plan.setup.rate_hz
        if given is not None:
            return given
        if clock is not None:
            clock = replace(clock, rate=clock.rate / self._plan.speed)
        if declared is not None:
            tolerance = 1e-6 * (100.0 if tolerance_ppm is None else tolerance_ppm)
            if clock is None or clock.u_rate >= tolerance:
                return declared if self._rate is None else self._rate
        elif clock is None:
            return None
        else:
            waited = time.monotonic() - (self._first_block or time.monotonic())
            if self._rate is None and clock.u_rate > RATE_ENOUGH and waited < patience:
                return None
        assert clock is not None
        if self._rate is not None and abs(clock.rate / self._rate - 1.0) < clock.u_rate:
            return self._rate  # no news within what is known
        return clock.rate

    def _remember(self, batch: Batch) -> None:
        engine = self._engine
        assert engine is not None
        self._events.extend(batch.events)
        if not len(batch.readings):
            return
        self._last_batch = batch
        last = len(batch.readings) - 1
        codes = batch.shown[0].codes
        views = []
        for c, view in enumerate(self._views):
            self._trends[c].extend(
                zip(
                    (batch.readings.start + batch.readings.duration).tolist(),
                    batch.readings.rms[:, c].tolist(),
                    strict=True,
                )
            )
            misleading = np.count_nonzero(codes[:, c] == JUDGEMENTS.index(Judgement.MISLEADS))
            points = np.array(self._trends[c]).T
            views.append(
                ChannelView(
                    channel=view.channel,
                    reading=batch.readings.cell(last, c),
                    verdicts=batch.verdicts(last, c),
                    trend=Trend(points[0], points[1]),
                    misleading_windows=view.misleading_windows + int(misleading),
                    windows=view.windows + len(batch.readings),
                )
            )
        self._views = tuple(views)
        self.summaries = tuple(
            with_run(summary, batch.readings, codes, c, engine.lost_seconds)
            for c, summary in enumerate(self.summaries)
        )
        window = batch.windows.row(last)
        # The row is a view of a long run; a copy lets that run go.
        self._window = replace(window, samples=window.samples.copy())

    def _publish(self) -> None:
        status = self._blocks.status
        stage, words = self._stage(status)
        engine = self._engine
        batch = self._last_batch
        self.snapshot = Snapshot(
            source=self._plan.source,
            stage=stage,
            words=words,
            stream=status,
            channels=self._views,
            window=self._window,
            pairs=batch.pairs(len(batch.readings) - 1) if batch is not None else (),
            events=tuple(self._events),
            advice=status.advice
            + (self.info.notes if self.info is not None else ())
            + (advice(self._plan.setup, engine.channels) if engine is not None else ()),
            limit=self._plan.setup.limit,
            nominal=engine.nominal if engine is not None else self._plan.setup.nominal_hz,
            seconds=engine.seconds if engine is not None else 0.0,
            windows=self._views[0].windows if self._views else 0,
            setup_name=self._plan.setup_name,
            number=self.snapshot.number + 1,
        )

    def _stage(self, status: ReaderStatus) -> tuple[Stage, str]:
        state = status.state
        if state is LinkState.FAILED:
            return Stage.FAILED, status.problem or "The source is lost for good."
        if state is LinkState.FINISHED:
            return Stage.FINISHED, "The source has given all it had; the last figures stand."
        if state in (LinkState.GONE, LinkState.ABSENT):
            return Stage.WAITING, status.problem or f"{status.link} is gone; looking for it."
        if state is LinkState.QUIET:
            return Stage.WAITING, status.problem or "Nothing has come for a while."
        if self._engine is not None and self._views and self._views[0].reading is not None:
            return Stage.MEASURING, "Measuring."
        if status.info is not None:
            if self._engine is None:
                return Stage.TIMING, "Measuring the sample rate from when samples arrive."
            return Stage.MEASURING, "Filling the first window."
        if status.bytes_received:
            return Stage.IDENTIFYING, status.problem or "Finding out the stream's format."
        return Stage.STARTING, status.problem or f"Waiting for the first bytes from {status.link}."
