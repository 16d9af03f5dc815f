"""crestwire 1: golden frames, every split point, damage, wraps, reboots, and the exact account."""

import struct
import zlib
from itertools import pairwise

import numpy as np
import pytest
from cobs import cobs
from crestwire_logger import M32, PER_SET, Logger, decode, joined, shape_of

from acquisition.block import BlockFlag
from acquisition.wire.crestwire import CrestwireDecoder
from acquisition.wire.crestwire_encode import (
    encode_data,
    encode_frame,
    encode_hello,
    pulse_payload,
    sets_that_fit,
    status_payload,
    text_payload,
)
from acquisition.wire.crestwire_frame import ChannelHello, Hello, Kind

# Worked by hand in the format's own page; the CRC is zlib's.
GOLDEN_DATA = "000411a507010210010420a10703020101020301020806083408cc070107ff0fbdd7f65600"
GOLDEN_HELLO = (
    "000410a5060102100104389d0703020101022703010403127a06020440420f0703010c04026403100204551109"
    "0517b7513a01010bc50703312e3019bb12c600"
)


def test_golden_data_frame():
    codes = np.array([[2048, 2100, 0], [2048, 1996, 4095]])
    frame = encode_data(codes, boot=0xA5, sequence=7, index=4096, tick=500000)
    assert frame.hex() == GOLDEN_DATA
    decoder, blocks = decode([bytes.fromhex(GOLDEN_DATA)])
    assert blocks[0].codes.tolist() == codes.tolist()
    assert blocks[0].tick == 500000
    assert decoder.tally.received == 3


def test_golden_hello_frame():
    hello = Hello(
        rate_mhz=8_000_000,
        tick_hz=1_000_000,
        bits=12,
        tolerance_ppm=100,
        firmware="1.0",
        channels=(ChannelHello("U", gain=0.0008, offset=-2048.0),),
    )
    head = {"boot": 0xA5, "sequence": 6, "index": 4096, "tick": 499000}
    assert encode_hello(hello, **head, channels=2).hex() == GOLDEN_HELLO
    decoder, _ = decode([bytes.fromhex(GOLDEN_HELLO), bytes.fromhex(GOLDEN_DATA)])
    info = decoder.info
    assert info is not None
    assert (info.rate, info.bits, info.rate_tolerance_ppm, info.firmware) == (
        8000.0,
        12,
        100,
        "1.0",
    )
    assert [c.name for c in info.channels] == ["U", "ch2"]
    assert info.channels[0].gain == pytest.approx(0.0008, rel=1e-7)  # float32's half step is 6e-8
    assert info.channels[0].offset_codes == -2048.0
    assert info.channels[0].rails == (0.0, 4095.0)


def test_crc_is_the_published_one():
    # "123456789" gives CBF43926: the check value published with CRC-32 (from memory, not read).
    assert zlib.crc32(b"123456789") == 0xCBF43926
    body = cobs.decode(bytes.fromhex(GOLDEN_DATA).strip(b"\0"))
    assert struct.unpack("<I", body[-4:])[0] == zlib.crc32(body[:-4])


def test_every_split_point_gives_the_same():
    logger = Logger(sets=5)
    stream = logger.other(Kind.HELLO) + logger.data() + logger.data() + b"noise\0" + logger.data()
    logger.data()  # lost on the line
    stream += logger.data(0) + logger.data()
    whole, blocks = decode([stream])
    assert whole.tally.lost == 5
    for at in range(len(stream) + 1):
        parts, split_blocks = decode([stream[:at], stream[at:]])
        assert parts.tally == whole.tally, at
        assert shape_of(split_blocks) == shape_of(blocks), at
    single, single_blocks = decode([bytes([b]) for b in stream])
    assert single.tally == whole.tally
    assert shape_of(single_blocks) == shape_of(blocks)


@pytest.mark.parametrize("kind", ["u16", "i16", "i24", "i32", "f32"])
@pytest.mark.parametrize("channels", [1, 3, 32])
def test_every_sample_type_comes_back(kind, channels):
    rng = np.random.default_rng(5)
    sets = min(sets_that_fit(channels, kind), 9)
    low, high = {
        "u16": (0, 65535),
        "i16": (-32768, 32767),
        "i24": (-(1 << 23), (1 << 23) - 1),
        "i32": (-(1 << 31), (1 << 31) - 1),
        "f32": (-1000, 1000),
    }[kind]
    codes = rng.integers(low, high, (channels, sets), endpoint=True)
    codes[0, 0], codes[-1, -1] = low, high
    frame = encode_data(codes, boot=0, sequence=0, index=0, tick=0, sample_type=kind)
    _, blocks = decode([frame])
    assert blocks[0].codes.tolist() == codes.tolist()


@pytest.mark.parametrize("length", range(240, 262))
def test_runs_around_254_bytes(length):
    # COBS: a block of 254 bytes without zero has no implied zero (Cheshire and Baker 1999).
    for body in (b"\x01" * length, b"\0" * length, b"\x01" * length + b"\0"):
        frame = encode_frame(
            9, body, boot=1, sequence=0, index=0, tick=0, channels=1, sample_code=1
        )
        assert b"\0" not in frame[1:-1]
        decoder, _ = decode([frame])
        assert (decoder.frames, decoder.tally.bad_frames) == (1, 0)


def test_counts_wrap_all_at_once():
    logger = Logger(index=M32 - 40, sequence=65533, tick=M32 - 40 * PER_SET)
    frames = [logger.data() for _ in range(8)]
    del frames[3]
    decoder, blocks = decode(frames)
    assert decoder.tally.lost == 16
    assert decoder.tally.reboots == 0
    assert decoder.tally.received == 7 * 16
    ticks = [b.tick for b in blocks if b.tick is not None]
    assert all(b > a for a, b in pairwise(ticks))


# name -> what is done, then (received, lost, discarded, reboots, duplicates)
def _heartbeat_closes_a_gap(logger):
    frames = [logger.data(), logger.data(), logger.data(0)]
    return [frames[0], frames[2]], (16, 16, 0, 0, 0)


def _hello_closes_a_gap(logger):
    frames = [logger.data(), logger.data(), logger.other(Kind.HELLO)]
    return [frames[0], frames[2]], (16, 16, 0, 0, 0)


def _the_logger_discards(logger):
    first = logger.data()
    logger.discard(100)
    return [first, logger.data(flags=1)], (32, 100, 100, 0, 0)


def _a_frame_comes_twice(logger):
    frames = [logger.data(), logger.data(), logger.data()]
    return [*frames[:2], frames[1], frames[0], frames[2]], (48, 0, 0, 0, 2)


def _another_boot(logger):
    first = [logger.data() for _ in range(5)]
    logger.reboot()
    later = [logger.data() for _ in range(4)]
    return [*first, *later[1:]], (80 + 48, 16, 0, 1, 0)


def _same_id_reboot_early(logger):
    first = [logger.data() for _ in range(5)]
    logger.reboot(boot=logger.boot)
    return [*first, logger.data()], (96, 0, 0, 1, 0)


def _same_id_reboot_late(logger):
    # Fewer frames than the new boot has sent: index and sequence go forward, the clock tells.
    first = [logger.data() for _ in range(5)]
    logger.reboot(boot=logger.boot)
    logger.tick = 3_000_000  # this board's clock runs on through its reset
    later = [logger.data() for _ in range(9)]
    return [*first, *later[8:]], (96, 128, 0, 1, 0)


def _only_a_status_is_lost(logger):
    first = logger.data()
    logger.other()
    return [first, logger.data()], (32, 0, 0, 0, 0)


@pytest.mark.parametrize(
    "happening",
    [
        _heartbeat_closes_a_gap,
        _hello_closes_a_gap,
        _the_logger_discards,
        _a_frame_comes_twice,
        _another_boot,
        _same_id_reboot_early,
        _same_id_reboot_late,
        _only_a_status_is_lost,
    ],
    ids=lambda f: f.__name__.strip("_"),
)
def test_the_ledger(happening):
    frames, expected = happening(Logger())
    for pieces in (frames, [b"".join(frames)]):
        decoder, blocks = decode(pieces)
        t = decoder.tally
        got = (t.received, t.lost, t.discarded_in_logger, t.reboots, t.duplicates)
        assert got == expected
        assert sum(b.sets for b in blocks) == t.received


def test_block_says_what_is_missing_before_it():
    logger = Logger()
    frames = [logger.data() for _ in range(6)]
    _, blocks = decode([frames[0] + frames[1], frames[4], frames[5]])
    assert [(b.index, b.lost_before, b.gap_before) for b in blocks] == [
        (0, 0, False),
        (64, 32, True),
        (80, 0, False),
    ]


def test_reboot_is_flagged_and_constant_id_is_told():
    logger = Logger()
    frames = [logger.data() for _ in range(3)]
    logger.reboot(boot=logger.boot)
    decoder, blocks = decode([*frames, logger.data()])
    assert blocks[-1].flags & BlockFlag.REBOOT
    assert blocks[-1].boot == 1
    assert decoder.info is not None
    assert any("constant boot id" in note for note in decoder.info.notes)


def test_reconnect_closes_the_gap():
    logger = Logger()
    first, _, third = logger.data(), logger.data(), logger.data()
    decoder = CrestwireDecoder()
    decoder.feed(first + third[:20], 0.0)
    decoder.reconnected()
    (block,) = decoder.feed(third[7:] + logger.data(), 1.0)
    assert block.flags & BlockFlag.RECONNECT
    assert (block.index, block.lost_before) == (48, 32)
    assert decoder.tally.bad_frames == 0
    assert decoder.tally.reconnects == 1


def test_invalid_floats_become_counted_gaps():
    codes = np.arange(20, dtype=np.float32).reshape(2, 10)
    codes[0, 3], codes[1, 4], codes[0, 9] = np.nan, np.inf, -np.inf
    head = {"boot": 0, "tick": 0, "sample_type": "f32"}
    frames = encode_data(codes, sequence=0, index=0, **head)
    frames += encode_data(np.ones((2, 4), np.float32), sequence=1, index=10, **head)
    decoder, blocks = decode([frames])
    assert [(b.index, b.sets, b.lost_before) for b in blocks] == [(0, 3, 0), (5, 4, 2), (10, 4, 1)]
    assert decoder.tally.invalid_sets == 3
    assert decoder.tally.received + decoder.tally.lost == 14


# sentence -> frame that must be refused, though its sum is good
REFUSED = {
    "a count that lies": lambda h: encode_frame(1, b"\0" * 8, **h, sample_code=1, count=9),
    "a count of 65535": lambda h: encode_frame(1, b"\0" * 8, **h, sample_code=1, count=65535),
    "an unknown sample type": lambda h: encode_frame(1, b"\0" * 8, **h, sample_code=77, count=2),
    "an unknown version": lambda h: encode_frame(1, b"\0" * 8, **h, sample_code=1, version=3),
}


@pytest.mark.parametrize("sentence", REFUSED)
def test_refused(sentence):
    head = {"boot": 1, "sequence": 0, "index": 0, "tick": 0, "channels": 2}
    decoder, blocks = decode([REFUSED[sentence](head)])
    assert not blocks
    assert decoder.tally.bad_frames == 1


def test_another_shape_is_refused_and_said():
    logger = Logger()
    first = logger.data()
    logger.channels = 3
    decoder, blocks = decode([first, logger.data()])
    assert joined(blocks).shape == (2, 16)
    assert "3 channels" in decoder.problem


def test_unknown_kinds_and_tags_are_skipped():
    logger = Logger()
    odd = logger.other(9, b"whatever") + logger.other(Kind.HELLO, b"\xee\x02ab\x01\xff")
    decoder, _ = decode([odd + logger.data()])
    assert decoder.tally.received == 16
    assert decoder.tally.bad_frames == 0


def test_status_pulse_text():
    logger = Logger()
    stream = logger.data() + logger.other(Kind.STATUS, status_payload(3, 9))
    stream += logger.other(Kind.PULSE, pulse_payload(7, 99))
    stream += logger.other(Kind.TEXT, text_payload("low battery\x1b[2J"))
    decoder, _ = decode([stream])
    assert decoder.pulse == (7, 99)
    assert decoder.messages == ("low battery [2J",)


def test_names_are_cleaned():
    hello = Hello(
        rate_mhz=1,
        unit_id="\x1b]0;evil\x07" + "x" * 200,
        channels=(ChannelHello("a\nb", unit="V\x00", gain=1.0),),
    )
    head = {"boot": 0, "sequence": 0, "index": 0, "tick": 0}
    decoder, _ = decode(
        [encode_hello(hello, **head, channels=1), Logger(sequence=1, channels=1, boot=0).data()]
    )
    info = decoder.info
    assert info is not None
    texts = [info.unit_id, *(c.name for c in info.channels), *(c.unit for c in info.channels)]
    assert all(t.isprintable() and len(t) <= 40 for t in texts)


def test_hello_is_waited_for_but_not_for_ever():
    logger = Logger()
    decoder = CrestwireDecoder()
    decoder.feed(logger.data(), 10.0)
    assert decoder.info is None
    decoder.feed(logger.data(), 11.6)
    assert decoder.info is not None
    assert decoder.info.rate is None


def test_a_changed_rate_starts_anew():
    logger = Logger()
    first = logger.other(Kind.HELLO, b"\x01\x04" + struct.pack("<I", 8_000_000)) + logger.data()
    second = logger.other(Kind.HELLO, b"\x01\x04" + struct.pack("<I", 4_000_000)) + logger.data()
    decoder, blocks = decode([first, second])
    assert decoder.info is not None
    assert decoder.info.rate == 4000.0
    assert blocks[1].gap_before


def test_garbage_without_a_zero_is_bounded():
    decoder = CrestwireDecoder()
    for _ in range(50):
        decoder.feed(b"\x55" * 4096, 0.0)
    assert decoder.tally.discarded_bytes == 50 * 4096
    decoder.feed(b"\0" + Logger().data(), 0.0)
    assert decoder.tally.received == 16


def test_refuses_to_encode_what_does_not_fit():
    with pytest.raises(ValueError, match="at most 2048"):
        encode_data(np.zeros((2, 600)), boot=0, sequence=0, index=0, tick=0)
    with pytest.raises(ValueError, match="1 to 32"):
        encode_data(np.zeros((33, 1)), boot=0, sequence=0, index=0, tick=0)


def test_the_frame_on_the_formats_page_is_what_it_says():
    import re
    from pathlib import Path

    page = Path(__file__).resolve().parents[2] / "docs" / "crestwire.md"
    hexes = re.search(r"```\n((?:[0-9a-f]{2}\s+)+)```", page.read_text(encoding="utf-8"))
    assert hexes is not None
    decoder, blocks = decode([bytes.fromhex(hexes[1])])
    assert decoder.tally.bad_frames == 0
    assert joined(blocks).tolist() == [[2048, 2100, 0], [2048, 1996, 4095]]
