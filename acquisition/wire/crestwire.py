"""crestwire 1, the decoder: marked, counted and summed frames into Blocks, every set accounted for.

Cut the bytes at 00, undo COBS, check the CRC: a hurt frame costs only itself, and no wrong sample
is accepted. Frames that follow each other without a break become one Block a feed, so that the
samples are touched by numpy alone. The encoder is `crestwire_encode.py`.
"""

import zlib
from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
from cobs import cobs

from acquisition.accounting import Tally
from acquisition.block import Block, BlockFlag
from acquisition.stream import StreamInfo, clean
from acquisition.wire.crestwire_frame import (
    BY_CODE,
    CHANNEL_LIMIT,
    CRC,
    HEADER,
    RESIDUE,
    U32,
    UNIT_LIMIT,
    VERSION,
    FrameFlag,
    Hello,
    Kind,
    SampleType,
    Tag,
    parse_hello,
    tagged,
    unpack_samples,
)
from acquisition.wire.crestwire_info import hello_rate, stream_info
from acquisition.wire.ledger import Ledger

DATA_HEAD = VERSION << 4 | Kind.DATA
OVERHEAD = HEADER.size + CRC.size
# HELLO comes each second; `info` waits a little longer for the names and scales in it, and in a
# file read faster than real time this many sets.
HELLO_PATIENCE_S = 1.5
HELLO_PATIENCE_SETS = 1 << 17
MESSAGES_KEPT = 8
FLAG_PAIRS = (
    (FrameFlag.RAIL, BlockFlag.RAIL),
    (FrameFlag.CLOCK_SET, BlockFlag.CLOCK_SET),
    (FrameFlag.TEST_PATTERN, BlockFlag.TEST_PATTERN),
)


class CrestwireDecoder:
    """Decodes one stream; see `acquisition.wire.decoder.Decoder`."""

    def __init__(self) -> None:
        self.info: StreamInfo | None = None
        self.problem = ""
        self.hello: Hello | None = None
        self.pulse: tuple[int, int] | None = None  # index and tick of the latest, as sent
        self.messages: tuple[str, ...] = ()  # what the logger said to a person, latest last
        self._ledger = Ledger()
        self._tail = b""
        self._overlong = False  # inside a unit that has already grown too long
        self._lead_in = True  # nothing good since the link opened: what fails is a cut unit
        self._shape: tuple[int, SampleType] | None = None  # channels and type of DATA
        self._first_good = float("nan")
        # What is to be told with the next Block.
        self._lost_before = 0
        self._gap = False
        self._flags = BlockFlag.NONE
        # The account beside the ledger's.
        self._received = 0
        self._invalid = 0
        self._bad = 0
        self._discarded_bytes = 0
        self._reconnects = 0
        self._unknown = 0  # frames of a kind not known here, skipped
        self.frames = 0  # with a good sum
        self._notes: tuple[str, ...] = ()

    @property
    def tally(self) -> Tally:
        """The account so far. Sets with NaN or infinity count as lost, and as invalid."""
        ledger = self._ledger
        return Tally(
            received=self._received,
            lost=ledger.lost + self._invalid,
            discarded_in_logger=ledger.discarded,
            bad_frames=self._bad,
            duplicates=ledger.duplicates,
            discarded_bytes=self._discarded_bytes,
            invalid_sets=self._invalid,
            reconnects=self._reconnects,
            reboots=ledger.reboots,
            tail_unknown_sets=ledger.tail_unknown,
        )

    def feed(self, data: bytes, arrived: float) -> list[Block]:
        """Decode what has come."""
        units = (self._tail + data).split(b"\0")
        self._tail = units.pop()
        blocks: list[Block] = []
        if self._overlong and units:
            self._discarded_bytes += len(units[0])
            units[0] = b""
            self._overlong = False
        at, last = 0, len(units)
        while at < last:
            at = self._run(units, at, arrived, blocks)
        if len(self._tail) > UNIT_LIMIT or self._overlong:
            if not self._overlong and not self._lead_in:
                self._bad += 1
            self._discarded_bytes += len(self._tail)
            self._tail = b""
            self._overlong = True
            self._lead_in = False
        return blocks

    def reconnected(self) -> None:
        """The link is back. What is missing shows when the next good frame comes."""
        self._discarded_bytes += len(self._tail)
        self._tail = b""
        self._overlong = False
        self._lead_in = True
        self._reconnects += 1
        self._flags |= BlockFlag.RECONNECT

    def finish(self) -> list[Block]:
        """The stream has ended; a HELLO that did not come is no longer waited for."""
        self._discarded_bytes += len(self._tail)
        self._tail = b""
        self._settle()
        return []

    def _run(self, units: list[bytes], at: int, arrived: float, blocks: list[Block]) -> int:
        """Take units up to and with the next run of frames that follow each other."""
        body = b""
        while at < len(units):
            unit = units[at]
            at += 1
            if unit:
                body = _body(unit)
                if body:
                    break
                self._refuse(unit)
        else:
            return at
        self._lead_in = False
        self.frames += 1
        head, boot, sequence, index, tick, channels, code, flags, _, count = HEADER.unpack_from(
            body
        )
        if head >> 4 != VERSION:
            self._count_bad(unit)
            self.problem = (
                f"this logger speaks crestwire {head >> 4}; only version {VERSION} is known here"
            )
            return at
        kind = head & 0x0F
        if kind == Kind.DATA and not self._fits(body, channels, code, count, boot):
            self._count_bad(unit)
            return at
        placed = self._ledger.place(boot, sequence, index, tick, body[-4:], arrived)
        if placed is None:
            return at
        self._lost_before += placed.lost
        self._gap |= placed.lost > 0 or placed.reboot
        if placed.reboot:
            self._flags |= BlockFlag.REBOOT
            if self._ledger.constant_boot_id:
                self._remark("the logger boots with a constant boot id: a reboot may hide in a gap")
        if self._first_good != self._first_good:
            self._first_good = arrived
        if kind != Kind.DATA:
            self._ledger.advance(0, 0, 0, tick)
            self._other(kind, body, channels)
            return at
        if flags & FrameFlag.DISCARDED and not placed.lost:
            self._gap = True
            self._remark(
                "the logger says that it discarded sets, but its index did not skip them:"
                " that loss cannot be counted"
            )
        # The rest of the run: a tight loop, because it is once a frame.
        ledger = self._ledger
        chunks = [body[HEADER.size : -CRC.size]]
        sets = last_sets = count
        said = flags
        first_tick = placed.tick
        sequence = ledger.sequence
        index = (ledger.index + count) & 0xFFFFFFFF
        frames = 0
        length = len(units)
        set_bytes = len(chunks[0]) // count if count else 0
        recent = ledger.recent.append
        unpack = HEADER.unpack_from
        decode, crc, refused = cobs.decode, zlib.crc32, cobs.DecodeError
        while at < length and set_bytes:
            unit = units[at]
            if not unit:
                at += 1
                continue
            try:
                body = decode(unit)
            except refused:
                break
            if len(body) < OVERHEAD or len(unit) > UNIT_LIMIT or crc(body) != RESIDUE:
                break
            h, b, s, i, t, ch, c, f, _, n = unpack(body)
            if (
                s != sequence
                or i != index
                or h != DATA_HEAD
                or b != boot
                or ch != channels
                or c != code
                or f & 1
                or n == 0
                or len(body) != OVERHEAD + n * set_bytes
            ):
                break
            chunks.append(body[18:-4])
            sequence = (s + 1) & 0xFFFF
            index = (i + n) & 0xFFFFFFFF
            sets += n
            last_sets = n
            frames += 1
            said |= f
            tick = t
            recent((s, body[-4:]))
            at += 1
        self.frames += frames
        position = ledger.position
        ledger.advance(sets, last_sets, frames, tick)
        if sets:
            self._emit(chunks, position, said, first_tick, arrived, blocks)
        self._settle_in_time(arrived)
        return at

    def _emit(
        self,
        chunks: list[bytes],
        position: int,
        said: int,
        tick: int,
        arrived: float,
        blocks: list[Block],
    ) -> None:
        assert self._shape is not None
        channels, kind = self._shape
        codes: npt.NDArray[Any] = unpack_samples(b"".join(chunks), kind, channels)
        flags = self._flags
        for theirs, ours in FLAG_PAIRS:
            if said & theirs:
                flags |= ours
        if self._lost_before and said & FrameFlag.DISCARDED:
            flags |= BlockFlag.DISCARDED
        block = Block(
            codes=codes,
            index=position,
            lost_before=self._lost_before,
            gap_before=self._gap,
            arrived=arrived,
            boot=self._ledger.boots,
            tick=tick,
            flags=flags,
        )
        self._lost_before, self._gap, self._flags = 0, False, BlockFlag.NONE
        if kind.name == "f32":
            good = np.isfinite(codes).all(axis=0)
            if not good.all():
                self._emit_valid(block, good, blocks)
                return
        self._received += block.sets
        self.problem = ""
        blocks.append(block)

    def _emit_valid(self, block: Block, good: npt.NDArray[np.bool_], blocks: list[Block]) -> None:
        """Leave out invalid sets: each stretch of them becomes a counted gap."""
        edges = np.flatnonzero(np.diff(good)) + 1
        bounds = [0, *edges.tolist(), len(good)]
        for begin, end in pairwise(bounds):
            if not good[begin]:
                self._invalid += end - begin
                self._lost_before += end - begin
                self._gap = True
                continue
            first = not blocks or blocks[-1].index < block.index
            blocks.append(
                replace(
                    block,
                    codes=block.codes[:, begin:end],
                    index=block.index + begin,
                    lost_before=self._lost_before + ((block.lost_before or 0) if first else 0),
                    gap_before=self._gap or (block.gap_before and first),
                    tick=block.tick if begin == 0 else None,
                    flags=block.flags if first else block.flags & ~BlockFlag.RECONNECT,
                )
            )
            self._received += end - begin
            self._lost_before, self._gap = 0, False

    def _fits(self, body: bytes, channels: int, code: int, count: int, boot: int) -> bool:
        """Whether a DATA frame is whole and of the stream's shape."""
        kind = BY_CODE.get(code)
        if kind is None or not 1 <= channels <= CHANNEL_LIMIT:
            return False
        if len(body) != OVERHEAD + count * channels * kind.width:
            return False
        if self._shape is None:
            self._shape = (channels, kind)
            return True
        if self._shape == (channels, kind):
            return True
        self.problem = (
            f"the stream began with {_shape_words(*self._shape)} and now carries"
            f" {_shape_words(channels, kind)}; start the watch anew to measure those"
        )
        return False

    def _other(self, kind: int, body: bytes, channels: int) -> None:
        payload = body[HEADER.size : -CRC.size]
        if kind == Kind.HELLO:
            hello = parse_hello(payload, min(channels, CHANNEL_LIMIT))
            if self._shape is not None and channels != self._shape[0]:
                return  # of some other stream's shape: _fits tells when DATA follows
            rate = hello_rate(hello)
            before = hello_rate(self.hello) if self.hello is not None else rate
            self.hello = hello
            self._ledger.declare(rate, hello.tick_hz)
            if rate != before:
                self._gap = True  # the spacing of sets changes here
            if self._shape is not None:
                self._describe()
        elif kind == Kind.PULSE:
            values = {tag: U32.unpack(v)[0] for tag, v in tagged(payload) if len(v) == U32.size}
            if Tag.PULSE_INDEX in values and Tag.PULSE_TICK in values:
                self.pulse = (values[Tag.PULSE_INDEX], values[Tag.PULSE_TICK])
        elif kind == Kind.TEXT:
            said = (
                clean(v.decode("utf-8", "replace"), 80)
                for t, v in tagged(payload)
                if t == Tag.MESSAGE
            )
            self.messages = (*self.messages, *said)[-MESSAGES_KEPT:]
        elif kind != Kind.STATUS:
            self._unknown += 1

    def _settle_in_time(self, arrived: float) -> None:
        if self.info is not None:
            return
        late = arrived - self._first_good >= HELLO_PATIENCE_S
        if self.hello is not None or late or self._received >= HELLO_PATIENCE_SETS:
            self._settle()

    def _settle(self) -> None:
        if self.info is None and self._shape is not None:
            self._describe()

    def _describe(self) -> None:
        """Make `info` from the frames' shape and the latest HELLO."""
        assert self._shape is not None
        channels, kind = self._shape
        self.info = stream_info(channels, kind, self.hello or Hello(), self._notes)

    def _remark(self, sentence: str) -> None:
        if sentence not in self._notes:
            self._notes = (*self._notes, sentence)
            if self.info is not None:
                self.info = replace(self.info, notes=self._notes)

    def _refuse(self, unit: bytes) -> None:
        """A unit that is no frame. The first one after opening is merely cut."""
        if self._lead_in:
            self._lead_in = False
            self._discarded_bytes += len(unit)
        else:
            self._count_bad(unit)

    def _count_bad(self, unit: bytes) -> None:
        self._bad += 1
        self._discarded_bytes += len(unit)


def _body(unit: bytes) -> bytes:
    """Body and CRC of a good frame, or b""."""
    try:
        body: bytes = cobs.decode(unit)
    except cobs.DecodeError:
        return b""
    if len(body) < OVERHEAD or len(unit) > UNIT_LIMIT or zlib.crc32(body) != RESIDUE:
        return b""
    return body


def _shape_words(channels: int, kind: SampleType) -> str:
    return f"{channels} channel{'s' if channels > 1 else ''} of {kind.name}"
