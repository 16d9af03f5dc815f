"""Identification: never sure and wrong, over generated streams; the ambiguous are called so."""

import numpy as np
import pytest

from acquisition.autodecode import AutoDecoder
from acquisition.errors import NotSamples
from acquisition.sniff import describe_bytes, identify
from acquisition.wire.crestwire_encode import encode_data
from acquisition.wire.raw import encode_raw
from acquisition.wire.text import encode_text


def signals(rng, channels, sets, per_cycle, bits, signed):
    """Sines, phase-cut sines, harmonics and triangles with noise, as a converter would give."""
    k = np.arange(sets)
    top, middle = 2**bits, 0 if signed else 2 ** (bits - 1)
    rows = []
    for _ in range(channels):
        t = 2 * np.pi * k / per_cycle + rng.uniform(0, 2 * np.pi)
        shape = [
            np.sin(t),
            np.sin(t) + 0.2 * np.sin(3 * t) + 0.1 * np.sin(5 * t + 1),
            np.where(t % np.pi > 1.2, np.sin(t), 0.0),
            2 / np.pi * np.arcsin(np.sin(t)),
        ][rng.integers(4)]
        row = rng.uniform(0.15, 0.4) * top * shape / np.abs(shape).max()
        rows.append(row + rng.normal(0, rng.choice([0.5, 2.0]), sets) + rng.uniform(-5, 5))
    low, high = (-(2 ** (bits - 1)), 2 ** (bits - 1) - 1) if signed else (0, top - 1)
    return np.clip(np.rint(np.array(rows)) + middle, low, high).astype(int)


def framed(codes, boot=3, sequence=0, index=0):
    out = b""
    for at in range(0, codes.shape[1], 32):
        piece = codes[:, at : at + 32]
        out += encode_data(
            piece, boot=boot, sequence=sequence, index=index, tick=index * 125, sample_type="i32"
        )
        index += piece.shape[1]
        sequence += 1
    return out


PREFIXES = {
    "nothing": lambda rng: b"",
    "noise": lambda rng: rng.integers(0, 256, int(rng.integers(1, 300)), np.uint8).tobytes(),
    "boot text": lambda rng: b"rst:0x1 (POWERON)\r\nadc ready 2 ch\r\n",
}


@pytest.mark.parametrize("prefix", PREFIXES)
@pytest.mark.parametrize("seed", range(12))
def test_never_sure_and_wrong(prefix, seed):
    rng = np.random.default_rng((seed, len(prefix)))
    for _ in range(6):
        channels, bits = int(rng.integers(1, 9)), int(rng.choice([10, 12, 14, 16]))
        signed, order = bool(rng.random() < 0.3), str(rng.choice(["little", "big"]))
        per_cycle = rng.uniform(32, 400)
        codes = signals(rng, channels, int(max(800, 5 * per_cycle)), per_cycle, bits, signed)
        before = PREFIXES[prefix](rng)
        cut = int(rng.integers(0, 2 * channels))
        kind = "i16" if signed else "u16"
        raw = identify(before + encode_raw(codes, sample_type=kind, byte_order=order)[cut:])
        got = (raw.format, raw.channels, raw.sample_type, raw.byte_order)
        if not raw.ambiguous and raw.format is not None:
            assert got == ("raw", channels, kind, order)
        text = identify(before[: 300 if prefix != "noise" else 0] + encode_text(codes)[cut:])
        assert (text.format, text.channels) == ("text", channels)
        frames = identify(before + framed(codes)[cut:])
        assert (frames.format, frames.channels, frames.sample_type) == (
            "crestwire",
            channels,
            "i32",
        )
        assert frames.confidence == 1.0


def test_noise_is_never_accepted():
    rng = np.random.default_rng(8)
    for _ in range(100):
        data = rng.integers(0, 256, int(rng.integers(300, 20000)), np.uint8).tobytes()
        assert identify(data).format is None


WAVE = signals(np.random.default_rng(1), 2, 2000, 160, 12, False)
AMBIGUOUS = {
    "constant input": np.full((2, 2000), 2048),
    "idle inputs": np.random.default_rng(2).integers(2046, 2050, (2, 2000)),
    "the same signal on two inputs": np.repeat(WAVE[:1], 2, axis=0),
    "two equal pairs": np.concatenate([WAVE, WAVE]),
    "12 samples a cycle": signals(np.random.default_rng(3), 2, 2000, 12, 12, False),
}


@pytest.mark.parametrize("sentence", AMBIGUOUS)
def test_the_ambiguous_are_called_so(sentence):
    data = encode_raw(AMBIGUOUS[sentence])
    found = identify(data)
    assert found.ambiguous
    assert found.confidence <= 0.5
    decoder = AutoDecoder()
    assert decoder.feed(data * 3, 0.0) == []  # nothing is measured on a guess
    assert "--format raw:" in decoder.problem


def test_every_other_comma_may_be_a_decimal_sign():
    lines = "".join(f"{k % 7},{k % 90 + 1:02d},{k % 5},{k % 80:02d}\n" for k in range(200))
    assert identify(lines.encode()).ambiguous


@pytest.mark.parametrize("data", [b"", b"\0", b"1", b"\n\n\n", b"1,2\n", bytes(300)])
def test_too_little_is_no_format(data):
    assert identify(data).format in (None, "raw")
    assert identify(data).confidence <= 0.5


@pytest.mark.parametrize("sets", [7, 2000])
@pytest.mark.parametrize("form", ["framed", "text", "raw"])
def test_auto_decoder_loses_nothing_it_listened_to(form, sets):
    data = {"framed": framed, "text": encode_text, "raw": encode_raw}[form](WAVE)
    whole = AutoDecoder()
    blocks = whole.feed(data, 0.0) + whole.finish()
    got = np.concatenate([b.codes for b in blocks], axis=1)
    first = 1 if form == "text" else 0
    assert got.tolist() == WAVE[:, first:].tolist()
    parts = AutoDecoder()
    split = [b for at in range(0, len(data), sets) for b in parts.feed(data[at : at + sets], 0.0)]
    split += parts.finish()
    assert np.concatenate([b.codes for b in split], axis=1).tolist() == got.tolist()
    assert parts.tally == whole.tally


def test_auto_decoder_finds_the_format_within_two_tenths_of_a_second():
    # 2 channels at 8000 sets/s: 0.2 s are 1600 sets.
    for data in (framed(WAVE[:, :1600]), encode_text(WAVE[:, :1600]), encode_raw(WAVE[:, :1600])):
        decoder = AutoDecoder()
        assert decoder.feed(data, 0.0) or decoder.info is not None


def test_auto_decoder_says_what_it_sees_and_stays_bounded():
    rng = np.random.default_rng(4)
    decoder = AutoDecoder()
    for _ in range(100):
        decoder.feed(rng.integers(0, 256, 4096, np.uint8).tobytes(), 0.0)
        assert len(decoder._held) <= 1 << 17
    assert "no stream of samples" in decoder.problem
    assert decoder.problem.isprintable()
    # And it goes on trying.
    decoder.feed(framed(np.tile(WAVE, 20)), 0.0)
    assert decoder.tally.received > 0
    assert decoder.problem == ""


@pytest.mark.parametrize(
    "wrong",
    ["binary", "raw:u8:2", "raw:u16:x", "raw:u16:2:up", "raw:u16:0", "text:1", "raw:u16:2:big:9"],
)
def test_a_format_that_is_none(wrong):
    with pytest.raises(NotSamples, match="no format known"):
        AutoDecoder(wrong)


def test_a_fixed_raw_format():
    decoder = AutoDecoder("raw:u16:2:big", rate=1000.0)
    assert decoder.info is not None
    assert (decoder.info.sample_type, decoder.info.byte_order, decoder.info.rate) == (
        "u16",
        "big",
        1000.0,
    )


def test_bytes_are_described_printable():
    assert describe_bytes(b"hello there\x1b[31m") == '"hello there·[31m"'
    assert describe_bytes(b"\xff\x00\x1b") == "ff 00 1b"
