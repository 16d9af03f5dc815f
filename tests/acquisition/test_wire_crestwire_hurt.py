"""crestwire 1 under damage: an exact account and no wrong sample, whatever comes."""

from itertools import pairwise

import numpy as np
import pytest
from crestwire_logger import M32, Logger, decode, shape_of
from hypothesis import given, settings
from hypothesis import strategies as st

from acquisition.wire.crestwire_encode import (
    encode_frame,
)
from acquisition.wire.crestwire_frame import Kind


def _walk(rng, steps):
    """A random walk of a logger with everything that can happen, and its true account."""
    logger = Logger(
        boot=int(rng.integers(256)),
        index=int(rng.choice([0, M32 - 200])),
        sequence=int(rng.choice([0, 65500])),
        tick=int(rng.choice([0, M32 - 9999])),
    )
    pieces = [logger.data()]
    received, lost, discarded = 16, 0, 0
    boot_lost = 0  # since the last frame that came
    fresh = False  # nothing came of this boot yet
    for _ in range(steps):
        what = rng.random()
        if what < 0.55:
            sets = int(rng.integers(1, 40))
            pieces.append(logger.data(sets))
            received, lost, boot_lost, fresh = received + sets, lost + boot_lost, 0, False
        elif what < 0.75:
            sets = int(rng.integers(1, 40))
            logger.data(sets)
            boot_lost += sets
        elif what < 0.8 and not boot_lost and not fresh:
            sets = int(rng.integers(1, 300))
            logger.discard(sets)
            pieces.append(logger.data(3, flags=1))
            received, lost, discarded = received + 3, lost + sets, discarded + sets
        elif what < 0.85:
            pieces.append(pieces[-1])
        elif what < 0.9:
            pieces.append(logger.data(0))
            lost, boot_lost, fresh = lost + boot_lost, 0, False
        elif what < 0.93:
            logger.reboot()
            boot_lost, fresh = 0, True
        else:
            junk = rng.integers(0, 256, int(rng.integers(1, 300)), np.uint8)
            pieces.append(b"\0" + junk.tobytes() + b"\0")
    pieces.append(logger.data(0))
    return pieces, received, lost + boot_lost, discarded


@pytest.mark.parametrize("seed", range(40))
def test_the_account_is_exact_whatever_happens(seed):
    rng = np.random.default_rng(seed)
    pieces, received, lost, discarded = _walk(rng, 300)
    decoder, blocks = decode(pieces)
    tally = decoder.tally
    assert (tally.received, tally.lost, tally.discarded_in_logger) == (received, lost, discarded)
    assert sum(b.sets for b in blocks) == received
    for before, after in pairwise(blocks):
        assert after.index == before.index + before.sets + (after.lost_before or 0)


@pytest.mark.parametrize("seed", range(24))
@pytest.mark.parametrize("rate", [1e-5, 1e-4, 1e-3, 1e-2])
def test_no_wrong_value_and_exact_loss_on_a_bad_line(seed, rate):
    rng = np.random.default_rng(seed)
    logger = Logger(sets=64, index=int(rng.integers(M32)))
    begin = logger.index
    clean = [logger.data() for _ in range(60)]
    sent = logger.index - begin
    damaged = _damage(b"".join(clean[1:]), rng, rate)
    decoder, blocks = decode([clean[0], damaged, logger.data(0)])
    tally = decoder.tally
    assert tally.received + tally.lost == sent
    for block in blocks:
        expected = (begin + block.index + np.arange(block.sets)) % M32 % 4096
        assert (block.codes == np.stack([expected, expected + 4096])).all()


def _damage(data, rng, rate):
    out = bytearray()
    for octet in data:
        if rng.random() >= rate:
            out.append(octet)
            continue
        kind = rng.integers(4)
        if kind == 0:
            out.append(octet ^ (1 << int(rng.integers(8))))
        elif kind == 1:
            out += bytes([octet, octet])
        elif kind == 2:
            out += rng.integers(0, 256, int(rng.integers(1, 20)), np.uint8).tobytes()
    return bytes(out)


@settings(deadline=None, max_examples=150)
@given(st.lists(st.binary(max_size=80), max_size=12), st.integers(0, 3))
def test_hostile_bytes_never_raise_and_slicing_changes_nothing(pieces, frames):
    logger = Logger(sets=3)
    for k in range(frames):
        pieces.insert(min(len(pieces), 2 * k), logger.data())
    stream = b"".join(pieces)
    whole, blocks = decode([stream])
    parts, split_blocks = decode(pieces)
    assert parts.tally == whole.tally
    assert shape_of(split_blocks) == shape_of(blocks)
    assert len(whole._tail) <= 4096


@settings(deadline=None, max_examples=100)
@given(st.binary(max_size=400), st.integers(0, 15), st.integers(0, 255), st.integers(0, 65535))
def test_any_payload_under_a_good_sum_never_raises(payload, kind, code, count):
    head = {"boot": 1, "sequence": 0, "index": 0, "tick": 0, "channels": 2}
    frame = encode_frame(kind, payload, **head, sample_code=code, count=count)
    logger = Logger(sequence=1)
    decoder, _ = decode([frame, logger.other(Kind.HELLO, payload), logger.data()])
    assert decoder.tally.received >= 0
