"""The reader thread: states, the ring and its exact overrun, loss and return, no sample missed."""

import itertools
import threading
import time

import numpy as np
import pytest

from acquisition.autodecode import AutoDecoder
from acquisition.block import BlockFlag
from acquisition.errors import LinkAbsent, LinkClosed, LinkFinished, LinkLost
from acquisition.links.pace import Paced, evenly
from acquisition.reader import Reader, merged
from acquisition.status import LinkState
from acquisition.wire.crestwire import CrestwireDecoder
from acquisition.wire.crestwire_encode import encode_data
from acquisition.wire.text import TextDecoder, encode_text

SETS = 64


def frames(count, first=0, boot=1):
    out = []
    for k in range(first, first + count):
        codes = np.stack([(k * SETS + np.arange(SETS)) % 4096] * 2)
        out.append(encode_data(codes, boot=boot, sequence=k, index=k * SETS, tick=k * SETS * 125))
    return out


class Script:
    """A link that plays a list: bytes to give, exceptions to raise; then it ends."""

    def __init__(self, steps, name="script"):
        self.name = name
        self.steps = list(steps)
        self.closed = False

    def read(self):
        if self.closed:
            raise LinkClosed(self.name)
        if not self.steps:
            raise LinkFinished(self.name)
        step = self.steps.pop(0)
        if isinstance(step, Exception):
            raise step
        if callable(step):
            return step()
        return step

    def close(self):
        self.closed = True


def drain(reader, patience=10.0):
    """All Blocks until the reader is through."""
    out = []
    end = time.monotonic() + patience
    while time.monotonic() < end:
        state = reader.status.state
        taken = reader.take(0.05)
        out += taken
        if not taken and state in (LinkState.FINISHED, LinkState.FAILED):
            return out
    raise AssertionError(f"still {reader.status}")


@pytest.fixture
def running():
    readers = []

    def make(*args, **options):
        reader = Reader(*args, **options)
        readers.append(reader)
        reader.start()
        return reader

    yield make
    for reader in readers:
        reader.stop()
        assert reader._thread is None or not reader._thread.is_alive()


def test_a_bounded_source_is_read_to_its_end(running):
    link = Script(frames(100))
    reader = running(lambda: link, CrestwireDecoder())
    blocks = drain(reader)
    assert sum(b.sets for b in blocks) == 100 * SETS
    status = reader.status
    assert status.state is LinkState.FINISHED
    assert (status.tally.received, status.tally.lost) == (100 * SETS, 0)
    assert status.info is not None
    assert status.bytes_received == sum(map(len, frames(100)))
    assert link.closed


def test_an_error_at_the_first_start_is_raised():
    def absent():
        raise LinkAbsent("there is no port here")

    reader = Reader(absent, CrestwireDecoder())
    with pytest.raises(LinkAbsent):
        reader.start()
    assert reader.take(0.0) == []
    reader.stop()


def test_a_full_ring_drops_the_oldest_exactly(running):
    done = threading.Event()
    reader = running(
        lambda: Script([*frames(100), lambda: done.wait(5) and b""]),
        CrestwireDecoder(),
        ring_sets=10 * SETS,
    )
    wait_until(lambda: reader.status.bytes_received and reader._overrun == 90 * SETS)
    done.set()
    blocks = drain(reader)
    tally = reader.status.tally
    assert (blocks[0].index, blocks[0].lost_before) == (90 * SETS, 90 * SETS)
    assert blocks[0].gap_before
    assert (tally.received, tally.lost, tally.host_overrun) == (10 * SETS, 90 * SETS, 90 * SETS)


def wait_until(true, patience=5.0):
    end = time.monotonic() + patience
    while not true():
        assert time.monotonic() < end, "it did not come to pass"
        time.sleep(0.002)


def test_a_stalled_consumer_loses_nothing_within_the_ring(running):
    # 30 s of two channels at 8 kS/s, delivered at once while nobody takes.
    count = 30 * 8000 // SETS
    clock = itertools.count(0.0, 0.002)
    reader = running(lambda: Script(frames(count)), CrestwireDecoder(), now=lambda: next(clock))
    wait_until(lambda: reader.status.state is LinkState.FINISHED, 20)
    assert sum(b.sets for b in drain(reader)) == count * SETS
    assert reader.status.tally.host_overrun == 0


def test_ring_by_seconds_forgets_what_is_older(running):
    now = [0.0]

    def later():
        now[0] += 1.0
        return frames(1, first=round(now[0]))[0]

    reader = running(
        lambda: Script([later] * 100), CrestwireDecoder(), ring_seconds=10.0, now=lambda: now[0]
    )
    wait_until(lambda: reader.status.state is LinkState.FINISHED)
    assert sum(b.sets for b in drain(reader)) == 11 * SETS
    assert reader.status.tally.host_overrun == 89 * SETS


def test_a_lost_link_is_found_again_and_the_gap_is_exact(running):
    every = frames(50)
    links = [
        Script([*every[:10], every[10][:40], LinkLost("unplugged")]),
        LinkAbsent("not there yet"),
        LinkAbsent("not there yet"),
        Script([every[19][9:], *every[20:30], LinkLost("again")]),
        Script(every[30:]),
    ]
    waits = []

    def opener():
        link = links.pop(0)
        if isinstance(link, Exception):
            raise link
        return link

    reader = running(opener, CrestwireDecoder(), wait=waits.append)
    blocks = drain(reader)
    tally = reader.status.tally
    assert (tally.received, tally.lost, tally.reconnects) == (40 * SETS, 10 * SETS, 2)
    assert tally.bad_frames == 0
    gaps = [(b.index, b.lost_before) for b in blocks if b.gap_before]
    assert gaps == [(20 * SETS, 10 * SETS)]
    assert sum(bool(b.flags & BlockFlag.RECONNECT) for b in blocks) == 2
    # The pace slows down while nothing is found and starts anew after good data.
    pauses = [w for w in waits if w >= 0.1]
    assert pauses == pytest.approx([0.1, 0.15, 0.225, 0.1])


def test_without_reconnect_a_loss_is_for_good(running):
    error = LinkLost("it was unplugged")
    error.add_note("plug it in")
    reader = running(lambda: Script([*frames(5), error]), CrestwireDecoder(), reconnect=False)
    assert sum(b.sets for b in drain(reader)) == 5 * SETS
    status = reader.status
    assert status.state is LinkState.FAILED
    assert (status.problem, status.advice) == ("it was unplugged", ("plug it in",))


def test_a_bug_does_not_end_in_silence(running):
    reader = running(lambda: Script([RuntimeError("oh dear")]), CrestwireDecoder())
    drain(reader)
    assert reader.status.state is LinkState.FAILED
    assert "oh dear" in reader.status.problem


def test_quiet_is_told(running):
    now = [0.0]

    def nothing():
        now[0] += 0.1
        time.sleep(0.001)
        return b""

    reader = running(
        lambda: Script([*frames(5), *[nothing] * 2000]), CrestwireDecoder(), now=lambda: now[0]
    )
    wait_until(lambda: reader.status.state is LinkState.QUIET)


def test_stop_ends_a_take_that_waits(running):
    reader = running(lambda: Script([lambda: time.sleep(0.01) or b""] * 10000), TextDecoder())
    begun = threading.Event()
    got = []

    def taker():
        begun.set()
        got.append(reader.take(30.0))

    thread = threading.Thread(target=taker)
    thread.start()
    begun.wait()
    reader.stop()
    thread.join(5.0)
    assert got == [[]]


def test_a_stream_that_is_none_says_so(running):
    junk = np.random.default_rng(0).integers(0, 256, 40000, np.uint8).tobytes()
    reader = running(lambda: Script([junk]), AutoDecoder())
    drain(reader)
    assert "no stream of samples" in reader.status.problem


def test_paced_text_is_timed_from_its_arrival(running):
    text = encode_text(np.tile(np.arange(100), (2, 16)) % 37)
    lines = text.splitlines(keepends=True)
    pieces = [(k * 0.002, line) for k, line in enumerate(lines)]
    reader = running(lambda: Paced(pieces, "paced", speed=2.0), TextDecoder())
    drain(reader)
    clock = reader.status.clock
    assert clock is not None
    # 1.6 s on a busy test machine: within 2 % shows that the pace is kept, no more.
    assert clock.rate == pytest.approx(1000.0, rel=0.02)


def test_paced_keeps_absolute_deadlines():
    now, slept = [100.0], []

    def sleep(seconds):
        slept.append(seconds)
        now[0] += seconds + 0.003  # every sleep is late

    pieces = [(k * 0.01, b"x") for k in range(200)]
    link = Paced(pieces, "late", now=lambda: now[0], sleep=sleep)
    got = b""
    with pytest.raises(LinkFinished):
        while True:
            got += link.read()
    assert len(got) == 200
    assert now[0] - 100.0 == pytest.approx(1.99, abs=0.02)  # lateness does not add up


def test_evenly_times_untimed_bytes():
    assert list(evenly([b"ab", b"cdef"], 2.0)) == [(1.0, b"ab"), (3.0, b"cdef")]


def test_merging_joins_only_what_follows():
    decoder = CrestwireDecoder()
    pieces = frames(6)
    blocks = [b for k in (0, 1, 2, 4, 5) for b in decoder.feed(pieces[k], 0.01 * k)]
    joined = merged(blocks)
    assert [(b.index, b.sets, b.lost_before) for b in joined] == [
        (0, 3 * SETS, 0),
        (4 * SETS, 2 * SETS, SETS),
    ]
    assert joined[0].arrived == pytest.approx(0.02)
    assert not joined[0].codes.flags.writeable
