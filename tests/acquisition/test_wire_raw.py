"""Raw words: both byte orders and signs, slicing, and losses noticed by how the words behave."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from acquisition.wire.raw import UNIT_SETS, RawDecoder, encode_raw

UNITS = 24
N = UNIT_SETS * UNITS


def codes_of(channels, n=N, noise=1.0, seed=0, signed=False):
    """Sines of unlike size, 160 samples a cycle, 12 bits."""
    rng = np.random.default_rng(seed)
    k = np.arange(n)
    rows = [
        1500 / (1 + c) * np.sin(2 * np.pi * k / 160 + c) + rng.normal(0, noise, n)
        for c in range(channels)
    ]
    return (np.rint(rows) + (0 if signed else 2048)).astype(int)


def decode(pieces, channels, kind="u16", order="little"):
    decoder = RawDecoder(channels, kind, order)
    blocks = [block for piece in pieces for block in decoder.feed(piece, 0.0)]
    blocks += decoder.finish()
    return decoder, blocks


def after_the_last_gap(blocks):
    at = max(k for k, b in enumerate(blocks) if b.gap_before)
    return np.concatenate([b.codes for b in blocks[at:]], axis=1)


@pytest.mark.parametrize("order", ["little", "big"])
@pytest.mark.parametrize("kind", ["u16", "i16"])
@pytest.mark.parametrize("channels", [1, 2, 8])
def test_words_come_back(channels, kind, order):
    codes = codes_of(channels, signed=kind == "i16")
    data = encode_raw(codes, sample_type=kind, byte_order=order)
    decoder, blocks = decode([data], channels, kind, order)
    assert np.concatenate([b.codes for b in blocks], axis=1).tolist() == codes.tolist()
    assert decoder.tally.lost is None
    assert decoder.tally.bad_frames == 0


@pytest.mark.parametrize("seed", range(10))
@pytest.mark.parametrize("channels", [1, 2, 3])
def test_a_lost_byte_is_noticed_and_the_rest_is_right(channels, seed):
    codes = codes_of(channels, seed=seed)
    data = bytearray(encode_raw(codes))
    at = int(np.random.default_rng(seed).integers(9 * UNIT_SETS, 14 * UNIT_SETS)) * 2 * channels
    del data[at + seed % (2 * channels)]
    decoder, blocks = decode([bytes(data)], channels)
    assert decoder.tally.bad_frames >= 1
    # After the last unit left out, all must be a true stretch of what was sent again.
    last = after_the_last_gap(blocks)
    assert last.tolist() == codes[:, -last.shape[1] :].tolist()
    assert last.shape[1] > (UNITS - 18) * UNIT_SETS
    gaps = [b for b in blocks if b.gap_before]
    assert gaps
    assert all(b.lost_before is None for b in gaps)


@pytest.mark.parametrize("seed", range(10))
def test_a_lost_word_is_noticed_when_channels_differ(seed):
    codes = codes_of(2, seed=seed)
    data = bytearray(encode_raw(codes))
    at = int(np.random.default_rng(seed).integers(10 * UNIT_SETS, 14 * UNIT_SETS)) * 4
    del data[at : at + 2]
    decoder, blocks = decode([bytes(data)], 2)
    assert decoder.tally.bad_frames >= 1
    last = after_the_last_gap(blocks)
    assert last.tolist() == codes[:, -last.shape[1] :].tolist()


def test_equal_channels_cannot_be_told_apart():
    codes = np.repeat(codes_of(1), 2, axis=0)
    data = bytearray(encode_raw(codes))
    del data[8000:8002]
    decoder, _ = decode([bytes(data)], 2)
    assert decoder.tally.lost is None  # which is why loss is never called 0


@pytest.mark.parametrize("level", [0, 2048, 65535])
def test_constant_input_is_let_through(level):
    codes = np.full((2, N), level)
    decoder, blocks = decode([encode_raw(codes)], 2)
    assert sum(b.sets for b in blocks) == N
    assert decoder.tally.bad_frames == 0


def test_no_false_alarm_when_a_load_changes():
    codes = codes_of(2, n=UNIT_SETS * 200)
    codes[1, N:] = 2048 + (codes[1, N:] - 2048) // 8
    decoder, _ = decode([encode_raw(codes)], 2)
    assert decoder.tally.bad_frames == 0


@settings(deadline=None, max_examples=60)
@given(
    st.lists(st.integers(0, N * 4), max_size=5),
    st.lists(st.integers(N, N * 4 - 8), max_size=2),
    st.binary(max_size=200),
)
def test_slicing_changes_nothing_and_nothing_raises(cuts, losses, junk):
    data = bytearray(encode_raw(codes_of(2)))
    for at in sorted(losses, reverse=True):
        del data[at]
    stream = bytes(data) + junk
    bounds = [0, *sorted(cuts), len(stream)]
    pieces = [stream[a:b] for a, b in pairwise(bounds)]
    whole, blocks = decode([stream], 2)
    parts, split_blocks = decode(pieces, 2)
    assert parts.tally == whole.tally
    a = [row for b in blocks for row in b.codes.T.tolist()]
    b = [row for b in split_blocks for row in b.codes.T.tolist()]
    assert a == b
