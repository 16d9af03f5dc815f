"""Text lines: every separator and ending, names, times, traps, the same in any slicing."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from acquisition.wire.text import LINE_LIMIT, TextDecoder, encode_text, read_lines
from acquisition.wire.text_shape import TextShape, learn, split

N = 200


def wave(channels=2, n=N, top=1023):
    k = np.arange(n)
    return np.stack(
        [np.rint(top / 2 * (1 + np.sin(0.3 * k + c))).astype(int) for c in range(channels)]
    )


def decode(pieces, finish=True):
    decoder = TextDecoder()
    blocks = [block for piece in pieces for block in decoder.feed(piece, 0.0)]
    if finish:
        blocks += decoder.finish()
    return decoder, blocks


def values(blocks):
    return np.concatenate([b.codes for b in blocks], axis=1).T.tolist() if blocks else []


def stretches(blocks):
    """What must not depend on slicing."""
    out = []
    for block in blocks:
        if out and not block.gap_before:
            out[-1][1].extend(block.codes.T.tolist())
        else:
            out.append((block.index, block.codes.T.tolist()))
    return out


@pytest.mark.parametrize("ending", ["\n", "\r\n", "\r", "\r\r\n"])
@pytest.mark.parametrize("separator", [",", ";", "\t", " ", "|", ", ", " ; ", "   ", ":", ",\t"])
@pytest.mark.parametrize("channels", [1, 2, 8])
def test_separators_and_endings(separator, ending, channels):
    codes = wave(channels)
    decoder, blocks = decode([encode_text(codes, separator=separator, ending=ending)])
    # The first line is never believed: it may be cut.
    assert values(blocks) == codes.T[1:].tolist()
    assert decoder.info is not None
    assert len(decoder.info.channels) == channels
    assert decoder.tally.lost is None
    assert decoder.tally.bad_frames == 0


@pytest.mark.parametrize("decimals", [1, 3, 6])
def test_floats_are_exactly_what_python_reads(decimals):
    rng = np.random.default_rng(3)
    codes = rng.normal(0, 300, (3, N))
    text = encode_text(codes, decimals=decimals)
    _, blocks = decode([text])
    expected = [[float(v) for v in line.split(b",")] for line in text.split()[1:]]
    assert values(blocks) == expected


def test_mixed_numbers_are_read_too():
    lines = [b"1,2.5", b"-3,.5", b"+4,1e2", b"5.,-1E-3", b"0007,9"] * 10
    _, blocks = decode([b"\n".join(lines) + b"\n"])
    assert values(blocks) == [[float(v) for v in line.split(b",")] for line in lines[1:]]


def test_header_names_and_units():
    text = b"U [V],I [A]\r\n" + encode_text(wave())
    decoder, blocks = decode([text])
    info = decoder.info
    assert info is not None
    assert [(c.name, c.unit, c.gain) for c in info.channels] == [("U", "V", 1.0), ("I", "A", 1.0)]
    assert values(blocks) == wave().T.tolist()


@pytest.mark.parametrize(
    ("form", "names"),
    [
        ("U:{},I:{}", ["U", "I"]),
        ("U={} I={}", ["U", "I"]),
        ("u = {} V; i = {} A", ["u", "i"]),
        ("ch1:{}\tch2:{}", ["ch1", "ch2"]),
        ('{{"volt":{},"amp":{}}}', ["volt", "amp"]),
    ],
)
def test_named_values(form, names):
    codes = wave()
    text = "".join(form.format(a, b) + "\r\n" for a, b in codes.T.tolist()).encode()
    decoder, blocks = decode([text])
    assert decoder.info is not None
    assert len(decoder.info.channels) == 2
    got = values(blocks)
    assert got == codes.T[-len(got) :].tolist()
    assert len(got) >= N - 1
    if "ch1" not in form:
        assert [c.name for c in decoder.info.channels] == names


def test_decimal_commas():
    text = "".join(f"{a / 10:.1f};{b / 10:.1f}\n" for a, b in wave().T.tolist()).replace(".", ",")
    _, blocks = decode([text.encode()])
    assert values(blocks) == (wave().T[1:] / 10).tolist()


def test_trailing_separator():
    text = "".join(f"{a},{b},\r\n" for a, b in wave().T.tolist()).encode()
    _, blocks = decode([text])
    assert values(blocks) == wave().T[1:].tolist()


def test_a_time_column_with_a_name_gives_the_rate():
    codes = wave()
    rows = "".join(f"{1000 + 500 * k},{a},{b}\n" for k, (a, b) in enumerate(codes.T.tolist()))
    decoder, blocks = decode([b"time_us,U,I\n" + rows.encode()])
    assert decoder.info is not None
    assert decoder.info.rate == pytest.approx(2000.0)
    assert values(blocks) == codes.T.tolist()


def test_a_time_column_without_a_name_is_noticed_and_said():
    codes = wave(n=600)
    rows = "".join(f"{125 * k + k % 2},{a},{b}\n" for k, (a, b) in enumerate(codes.T.tolist()))
    decoder, blocks = decode([rows.encode()])
    assert decoder.info is not None
    assert decoder.info.notes
    assert values(blocks) == codes.T[1:].tolist()


def test_a_slow_rise_is_no_time_column():
    # 10 bits, 400 samples a cycle: the first 90 lines all rise or stand.
    k = np.arange(800)
    codes = np.stack([np.rint(512 - 500 * np.cos(2 * np.pi * k / 400)).astype(int)] * 2)
    decoder, _ = decode([encode_text(codes)])
    assert decoder.info is not None
    assert len(decoder.info.channels) == 2


def test_a_jump_of_the_time_column_is_a_gap():
    rows = [f"{100 * (k + (50 if k >= 100 else 0))},{v}\n" for k, v in enumerate(wave(1)[0])]
    _, blocks = decode([b"us,U\n" + "".join(rows).encode()])
    assert [b.gap_before for b in blocks] == [False, True]
    assert blocks[1].lost_before is None
    assert blocks[0].sets == 100


# sentence -> line off the shape
OFF = {
    "a short line": b"512",
    "an empty field": b"512,",
    "an empty field first": b",512",
    "a long line": b"512,498,7",
    "two lines run together": b"512,498510,497,1",
    "a letter": b"51x,498",
    "two numbers in a field": b"51 2,498",
    "a sign alone": b"-,498",
    "two points": b"1.2.3,498",
    "a zero byte": b"51\x002,498",
    "high bytes": b"\xff\xfe,498",
    "boot text": b"rst:0x1 (POWERON_RESET)",
    "an underscore that Python would take": b"5_12,498",
    "a hexadecimal": b"0x51,498",
}


@pytest.mark.parametrize("sentence", OFF)
def test_a_line_off_the_shape_is_dropped_and_counted(sentence):
    codes = wave().T.tolist()
    lines = [f"{a},{b}".encode() for a, b in codes]
    lines[100] = OFF[sentence]
    decoder, blocks = decode([b"\n".join(lines) + b"\n"])
    assert values(blocks) == codes[1:100] + codes[101:]
    assert decoder.tally.bad_frames == 1
    assert blocks[1].gap_before
    assert blocks[1].lost_before is None
    # The dropped line keeps its place, so that time goes on rightly.
    assert blocks[1].index == blocks[0].index + blocks[0].sets + 1


@pytest.mark.parametrize("word", [b"nan", b"inf", b"-Infinity", b"NaN"])
def test_no_number_is_an_invalid_set(word):
    lines = [f"{a},{b}".encode() for a, b in wave().T.tolist()]
    lines[100] = word + b",498"
    decoder, blocks = decode([b"\n".join(lines) + b"\n"])
    assert decoder.tally.invalid_sets == 1
    assert np.isfinite(values(blocks)).all()


def test_digits_without_end_are_no_minus_one():
    lines = [f"{a},{b}".encode() for a, b in wave().T.tolist()]
    lines[100] = b"99999999999999999999999,498"  # numpy gives -1 for it, without a word
    _, blocks = decode([b"\n".join(lines) + b"\n"])
    assert values(blocks)[99] == [1e23, 498.0]


def test_a_line_without_end_is_bounded():
    decoder = TextDecoder()
    for _ in range(100):
        decoder.feed(b"1" * 1000, 0.0)
        assert len(decoder._tail) <= LINE_LIMIT
    blocks = decoder.feed(b"\n" + encode_text(wave()), 0.0)
    assert values(blocks) == wave().T.tolist()


def test_words_that_never_become_numbers_are_said():
    decoder = TextDecoder()
    for k in range(2000):
        decoder.feed(b"the quick logger %d says nothing\n" % k, 0.0)
    assert "not of numbers" in decoder.problem
    assert len(decoder._learning) <= 2048


def test_lines_that_change_shape_are_said():
    decoder, _ = decode([encode_text(wave())])
    decoder.feed(encode_text(wave(3)), 0.0)
    assert "no longer hold 2 numbers" in decoder.problem


def test_reconnect_drops_the_cut_line():
    decoder = TextDecoder()
    text = encode_text(wave())
    decoder.feed(text + b"51", 0.0)
    decoder.reconnected()
    (block,) = decoder.feed(b"2,498\r\n1,2\r\n3,4\r\n", 1.0)
    assert block.codes.T.tolist() == [[1, 2], [3, 4]]
    assert block.gap_before
    assert block.lost_before is None


LINES = st.lists(
    st.one_of(
        st.tuples(st.integers(-999, 9999), st.integers(-9, 9)).map(lambda p: b"%d,%d" % p),
        st.tuples(st.integers(0, 99), st.integers(0, 99)).map(lambda p: b"%d.%02d,1.50" % p),
        st.binary(max_size=12),
        st.sampled_from(list(OFF.values())),
        st.sampled_from([b"nan,1", b"1e400,2", b" 3 , 4 ", b"", b"\r", b"99999999999999999999,1"]),
    ),
    max_size=30,
)


@settings(deadline=None, max_examples=200)
@given(LINES, st.lists(st.integers(0, 400), max_size=6))
def test_any_slicing_gives_the_same_and_nothing_raises(lines, cuts):
    stream = encode_text(wave(n=40)) + b"\r\n".join(lines) + b"\n" + encode_text(wave(n=3))
    whole, blocks = decode([stream])
    bounds = [0, *sorted(400 + c for c in cuts), len(stream)]
    pieces = [stream[a:b] for a, b in pairwise(bounds)]
    parts, split_blocks = decode(pieces)
    assert parts.tally == whole.tally
    assert stretches(split_blocks) == stretches(blocks)


@settings(deadline=None, max_examples=150)
@given(LINES)
def test_the_fast_road_reads_what_the_strict_one_reads(lines):
    kept = [
        line for line in lines if line.strip(b"\r\n") and b"\n" not in line and b"\r" not in line
    ]
    if not kept:
        return
    shape = TextShape(2)
    got, good = read_lines(b"\n".join(kept) + b"\n", shape)
    rows = [split(line, shape) for line in kept]
    assert good.tolist() == [row is not None for row in rows]
    strict = np.array([row for row in rows if row is not None], float).reshape(-1, 2)
    np.testing.assert_array_equal(got, strict)


@settings(deadline=None, max_examples=100)
@given(st.binary(max_size=3000))
def test_hostile_bytes_never_raise(data):
    decoder, _ = decode([data])
    assert decoder.tally.received >= 0


@settings(deadline=None, max_examples=100)
@given(st.lists(st.binary(max_size=30), max_size=30))
def test_learning_never_raises(lines):
    learn([line.replace(b"\n", b"") for line in lines])


@pytest.mark.parametrize("line", [b"512, \r\n", b"512,\t\r\n", b" ,512\r\n", b"512,\r\n"])
def test_a_field_of_blanks_is_no_number(line):
    """The lowest code sent is 480: numpy alone would read the blanks as 0 or -1."""
    good = b"".join(b"%d,%d\r\n" % (500 + k % 20, 480 + k % 13) for k in range(600))
    decoder = TextDecoder(1000.0)
    blocks = decoder.feed(good + line + good, 0.0) + decoder.finish()
    assert min(int(block.codes.min()) for block in blocks) == 480
    assert decoder.tally.bad_frames == 1
