"""Reader: the thread that takes bytes from a link, decodes them and keeps Blocks until asked.

It never waits for who takes the Blocks: when its ring is full the oldest go, exactly counted. The
lock is held only while a list changes hands, never while decoding. All the world sees of it is one
immutable `status`, replaced whole. A lost link is looked for again, ever more slowly.
"""

import math
import threading
import time
from collections import deque
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from acquisition.accounting import Tally
from acquisition.block import Block, BlockFlag
from acquisition.clock import ClockFit
from acquisition.errors import LinkClosed, LinkError, LinkFinished
from acquisition.link import Link
from acquisition.status import LinkState, ReaderStatus
from acquisition.wire.decoder import Decoder

SAMPLES_KEPT = 1 << 25  # whatever the rate: 64 to 256 MB
BACKOFF_S = (0.1, 1.5, 2.0)  # first, growth, most
QUIET_S = 1.0
QUIET_READS = 10  # usual intervals between arrivals
PUBLISH_S = 0.05  # 20 a second, twice what a screen asks for
ESTIMATE_S = 0.5
CLOCK_POINT_S = 0.002  # points closer than this tell the clock nothing more
TRICKLE = 128  # bytes: reads shorter than this are let pile up for a moment
TRICKLE_S = 0.002  # 4095 bytes of a tty's queue at 2 MB/s
MERGE_S = 0.25  # longest Block that `take` makes of small ones


class Reader:
    """Reads one source until stopped; for use from one other thread."""

    def __init__(
        self,
        open_link: Callable[[], Link],
        decoder: Decoder,
        *,
        ring_seconds: float = 60.0,
        ring_sets: int | None = None,
        reconnect: bool = True,
        now: Callable[[], float] = time.monotonic,
        wait: Callable[[float], object] | None = None,
    ) -> None:
        """Prepare; nothing is opened yet.

        Args:
            open_link: opens the source, now and after each loss.
            decoder: whatever fits the stream, usually an AutoDecoder.
            ring_seconds: Blocks older than this are dropped when nobody takes them.
            ring_sets: the same as a count of sets, instead.
            reconnect: look for a lost source again; else it is lost for good.
            now: the host's monotonic clock. [s]
            wait: how to pass time between attempts; may return early.
        """
        self._open_link = open_link
        self._decoder = decoder
        self._ring_seconds = ring_seconds
        self._ring_sets = ring_sets
        self._reconnect = reconnect
        self._now = now
        self._stopping = threading.Event()
        self._wait = wait if wait is not None else self._stopping.wait
        self._ring: deque[Block] = deque()
        self._sets_in_ring = 0
        self._overrun = 0
        self._changed = threading.Condition()
        self._thread: threading.Thread | None = None
        self._link: Link | None = None
        self._clock = ClockFit()
        self._clock_at = -math.inf
        self._estimated = -math.inf
        self._published = -math.inf
        self._bytes = 0
        self._last_heard = 0.0
        self._pause = BACKOFF_S[0]
        self._usual_gap = 0.0  # s between arrivals, a running mean
        self.status = ReaderStatus()

    def start(self) -> None:
        """Open the source and begin.

        Raises:
            LinkError: it cannot be opened; nothing is left running.
        """
        self._link = self._open_link()
        self._last_heard = self._now()
        self.status = replace(self.status, state=LinkState.LISTENING, link=self._link.name)
        self._thread = threading.Thread(target=self._run, name="reader", daemon=True)
        self._thread.start()

    def stop(self) -> None:
        """Let go of the source and end the thread. Safe to call twice."""
        self._stopping.set()
        with self._changed:
            self._changed.notify_all()
        if self._thread is not None:
            self._thread.join(timeout=5.0)

    def take(self, timeout: float) -> list[Block]:
        """Everything that has come since the last call; waits at most `timeout` s for something."""
        with self._changed:
            if not self._ring and not self._over():
                self._changed.wait_for(lambda: bool(self._ring) or self._over(), timeout)
            taken = list(self._ring)
            self._ring.clear()
            self._sets_in_ring = 0
        return merged(taken)

    def _over(self) -> bool:
        return self._stopping.is_set() or self.status.state in (
            LinkState.FINISHED,
            LinkState.FAILED,
        )

    # What follows runs on the reader's thread.

    def _run(self) -> None:
        try:
            while not self._stopping.is_set():
                try:
                    self._read_on()
                except LinkFinished:
                    self._keep(self._decoder.finish())
                    self._publish(LinkState.FINISHED)
                    return
                except LinkClosed:
                    return
                except LinkError as error:
                    if not self._reconnect:
                        self._fail(error)
                        return
                    self._find_again(error)
        except Exception as error:  # a bug of ours must not end in silence
            self._fail(error)
        finally:
            if self._link is not None:
                self._link.close()
            with self._changed:
                self._changed.notify_all()

    def _read_on(self) -> None:
        """Read until the link ends or breaks, or we are stopped."""
        link = self._link
        assert link is not None
        while not self._stopping.is_set():
            data = link.read()
            arrived = self._now()
            if data:
                self._bytes += len(data)
                gap = min(arrived - self._last_heard, 1.0)
                self._usual_gap += 0.05 * (gap - self._usual_gap)
                self._last_heard = arrived
                blocks = self._decoder.feed(data, arrived)
                if blocks:
                    self._pause = BACKOFF_S[0]  # it is back, not merely open
                    self._time(blocks, arrived)
                    self._keep(blocks)
            state = self._state(arrived)
            if state is not self.status.state or arrived - self._published >= PUBLISH_S:
                self._publish(state)
            if data and len(data) < TRICKLE:
                self._wait(TRICKLE_S)

    def _state(self, now: float) -> LinkState:
        if now - self._last_heard > max(QUIET_S, QUIET_READS * self._usual_gap):
            return LinkState.QUIET
        return LinkState.LISTENING if self._decoder.info is None else LinkState.LIVE

    def _time(self, blocks: list[Block], arrived: float) -> None:
        """Give the clock its point: the end of the last Block had come by now."""
        info = self._decoder.info
        rate = info.rate if info is not None else None
        restart = any(b.flags & BlockFlag.REBOOT for b in blocks) or any(
            b.flags & BlockFlag.RECONNECT and b.lost_before is None for b in blocks
        )
        if rate != self._clock.declared:
            # Learning the rate is no change of it.
            restart |= self._clock.declared is not None
            self._clock.declared = rate
        if restart:
            self._clock.restart()
        if arrived - self._clock_at >= CLOCK_POINT_S or restart:
            self._clock.add(blocks[-1].index + blocks[-1].sets, arrived)
            self._clock_at = arrived

    def _keep(self, blocks: list[Block]) -> None:
        if not blocks:
            return
        with self._changed:
            for block in blocks:
                self._ring.append(block)
                self._sets_in_ring += block.sets
            while len(self._ring) > 1 and self._too_much():
                self._drop_oldest()
            self._changed.notify_all()

    def _too_much(self) -> bool:
        if self._ring_sets is not None:
            return self._sets_in_ring > self._ring_sets
        oldest, newest = self._ring[0], self._ring[-1]
        if self._sets_in_ring * len(newest.codes) > SAMPLES_KEPT:
            return True
        return newest.arrived - oldest.arrived > self._ring_seconds

    def _drop_oldest(self) -> None:
        """The next Block says what is missing before it, now with this one."""
        old = self._ring.popleft()
        self._sets_in_ring -= old.sets
        self._overrun += old.sets
        following = self._ring[0]
        before = None
        if old.lost_before is not None and following.lost_before is not None:
            before = old.lost_before + old.sets + following.lost_before
        kept = BlockFlag.REBOOT | BlockFlag.RECONNECT | BlockFlag.DISCARDED
        self._ring[0] = replace(
            following,
            lost_before=before,
            gap_before=True,
            flags=following.flags | (old.flags & kept),
        )

    def _publish(self, state: LinkState, problem: str = "", advice: tuple[str, ...] = ()) -> None:
        now = self._now()
        self._published = now
        clock = self.status.clock
        if now - self._estimated >= ESTIMATE_S or state is LinkState.FINISHED:
            self._estimated = now
            clock = self._clock.estimate()
        self.status = ReaderStatus(
            state=state,
            link=self._link.name if self._link is not None else self.status.link,
            info=self._decoder.info,
            tally=self._tally(),
            clock=clock,
            bytes_received=self._bytes,
            problem=problem or self._decoder.problem,
            advice=advice,
        )

    def _tally(self) -> Tally:
        tally = self._decoder.tally
        if not self._overrun:
            return tally
        return replace(
            tally,
            received=tally.received - self._overrun,
            lost=None if tally.lost is None else tally.lost + self._overrun,
            host_overrun=self._overrun,
        )

    def _find_again(self, error: Exception) -> None:
        """Look for the source until it opens again."""
        if self._link is not None:
            self._link.close()
        _, growth, most = BACKOFF_S
        self._publish(LinkState.GONE, str(error), _notes(error))
        while not self._stopping.is_set():
            self._wait(self._pause)
            if self._stopping.is_set():
                return
            self._pause = min(self._pause * growth, most)
            self._publish(LinkState.OPENING, str(error), _notes(error))
            try:
                self._link = self._open_link()
            except LinkError as again:
                error = again
                self._publish(LinkState.ABSENT, str(error), _notes(error))
                continue
            self._decoder.reconnected()
            self._last_heard = self._now()
            self._publish(LinkState.LISTENING)
            return

    def _fail(self, error: Exception) -> None:
        self._publish(LinkState.FAILED, str(error) or type(error).__name__, _notes(error))


def merged(blocks: list[Block]) -> list[Block]:
    """Neighbours that follow each other without a break, as one: fewer and longer Blocks."""
    out: list[Block] = []
    run: list[Block] = []
    for block in blocks:
        if run and not _continues(run, block):
            out.append(_joined(run))
            run = []
        run.append(block)
    if run:
        out.append(_joined(run))
    return out


def _continues(run: list[Block], block: Block) -> bool:
    last = run[-1]
    return (
        not block.gap_before
        and block.lost_before == 0
        and block.boot == last.boot
        and block.index == last.index + last.sets
        and block.codes.dtype == last.codes.dtype
        and len(block.codes) == len(last.codes)
        and not block.flags & (BlockFlag.REBOOT | BlockFlag.RECONNECT | BlockFlag.DISCARDED)
        and block.arrived - run[0].arrived <= MERGE_S
    )


def _joined(run: list[Block]) -> Block:
    if len(run) == 1:
        return run[0]
    flags = BlockFlag.NONE
    for block in run:
        flags |= block.flags
    # Joined along the way they lie in memory, sets after sets.
    codes = np.concatenate([block.codes.T for block in run]).T
    return replace(run[0], codes=codes, arrived=run[-1].arrived, flags=flags)


def _notes(error: Exception) -> tuple[str, ...]:
    return tuple(getattr(error, "__notes__", ()))
