"""Decimal numbers out of a table's bytes, all lines of a piece at once.

Eight characters at a time are taken as one 64-bit word and turned into a number with three
multiplications; a sign and the place of the decimal mark are seen to by shifts. The result is the
correctly rounded value: the digits are exact in an integer below 2^53, and one division by an
exact power of ten rounds once. A line with anything else in it (an exponent, a blank, `OL`) is
handed back by number for the slow road; nothing is guessed.

Source: arithmetic worked out here, for little-endian words; checked in tests against `float`.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Words = npt.NDArray[np.uint64]
Places = npt.NDArray[np.int64]
Mask = npt.NDArray[np.bool_]

NEWLINE, MINUS, PLUS = 10, 45, 43
LONGEST = 16  # characters of a number, without its sign
PAD = b"0" * 16  # before a piece, so that the words of its first fields lie inside
_EXACT = 90_071_992  # a high half below this leaves the whole number under 2^53
_POWERS = 10.0 ** np.arange(LONGEST + 1)  # exact up to 10^22


def _word(octets: list[int]) -> np.uint64:
    return np.uint64(int.from_bytes(bytes(octets), "little"))


_ZEROS = _word([0x30] * 8)
_HIGH_NIBBLES = _word([0xF0] * 8)
_SIX = _word([0x06] * 8)
_PAIRS = _word([0xFF, 0, 0, 0, 0xFF, 0, 0, 0])
# The last n characters of a word, n = 0 .. 8.
_LAST = [_word([0] * (8 - n) + [0xFF] * n) for n in range(9)]


@dataclass(frozen=True, slots=True, eq=False)
class Parsed:
    """What a piece held. Lines count from 0 within the piece."""

    table: npt.NDArray[np.float64]  # (columns, lines); meaningless where `odd`
    odd: Mask  # (lines,) left for the slow road
    starts: Places  # (lines,) where each line begins in the piece
    ends: Places  # (lines,) where its line end stands


def parse(piece: bytes, separator: int, decimal: int, columns: int) -> Parsed:
    """Read a piece of whole lines.

    Args:
        piece: ends on a newline; no carriage returns.
        separator, decimal: character codes.
        columns: fields a line must have; lines with other counts are odd.
    """
    text = _Text(PAD + piece)
    raw = text.raw[len(PAD) :]
    newline = raw == NEWLINE
    count = int(np.count_nonzero(newline))
    marks = np.flatnonzero(newline | (raw == separator))
    if len(marks) == count * columns and bool(newline[marks[columns - 1 :: columns]].all()):
        # Every line has its separators: the marks are a table already.
        odd = np.zeros(count, np.bool_)
        ends = np.ascontiguousarray(marks.reshape(count, columns).T)
    else:
        last = np.flatnonzero(newline[marks])  # place of each newline among the marks
        odd = np.diff(last, prepend=-1) != columns
        # An odd line's fields may lie anywhere; they are parsed and then thrown away.
        places = np.maximum(last - np.arange(columns - 1, -1, -1)[:, None], 0)
        ends = marks[places]
    line_ends = ends[-1]
    line_starts = np.concatenate(([0], line_ends[:-1] + 1)) if count else line_ends
    table = np.empty((columns, count))
    starts = line_starts
    for column in range(columns):
        _column(text, starts, ends[column], decimal, table[column], odd)
        starts = np.minimum(ends[column] + 1, len(piece) - 1)  # an odd line's may lie beyond
    return Parsed(table, odd, line_starts, line_ends)


class _Text:
    """A padded piece as characters and as words; places count within the piece."""

    def __init__(self, padded: bytes) -> None:
        self.raw = np.frombuffer(padded, np.uint8)
        count = len(padded) - 15
        self.low: Words = np.ndarray((count,), "<u8", padded, 8, (1,))  # the 8 before a place
        self.high: Words = np.ndarray((count,), "<u8", padded, 0, (1,))  # the 8 before those

    def before(self, distance: int) -> npt.NDArray[np.uint8]:
        """Characters so far before each place."""
        return self.raw[len(PAD) - distance :]


def _column(
    text: _Text,
    starts: Places,
    ends: Places,
    decimal: int,
    out: npt.NDArray[np.float64],
    odd: Mask,
) -> None:
    """Parse one field of every line into `out`; add what does not read to `odd`."""
    if not len(starts):
        return
    first = text.before(0)[starts]
    minus = first == MINUS
    signed = minus | (first == PLUS)
    length = ends - starts
    if signed.any():
        length -= signed
    shortest, longest = int(length.min()), int(length.max())
    if shortest < 1 or longest > LONGEST:
        odd |= (length < 1) | (length > LONGEST)
        np.clip(length, 1, LONGEST, out=length)
        shortest, longest = int(length.min()), int(length.max())
    low = _keep_last(text.low[ends], length, 8)
    high = _keep_last(text.high[ends], length, 16) if longest > 8 else None
    # Numbers of a column mostly have one count of decimals: try the last line's, then the rest.
    last = text.before(0)[int(ends[-1] - length[-1]) : int(ends[-1])]
    where = np.flatnonzero(last == decimal)
    guess = len(last) - 1 - int(where[-1]) if len(where) else -1
    if guess >= 0:
        here = text.before(1 + guess)[ends] == decimal
        if shortest <= max(guess, 1):  # a digit beside the mark
            here &= length > max(guess, 1)
        if here.all():
            _value(low, high, guess, out, odd, slice(None))
            if minus.any():
                np.negative(out, out=out, where=minus)
            return
        left = np.flatnonzero(~here)
        _value(low, high, guess, out, odd, np.flatnonzero(here))
    else:
        left = np.arange(len(ends))
    for decimals in range(LONGEST):
        if not len(left) or decimals >= longest:
            break
        if decimals == guess:
            continue
        here = text.before(1 + decimals)[ends[left]] == decimal
        here &= length[left] > max(decimals, 1)
        if here.any():
            _value(low, high, decimals, out, odd, left[here])
            left = left[~here]
    if len(left):
        _value(low, high, None, out, odd, left)
    if minus.any():
        np.negative(out, out=out, where=minus)


def _value(
    low: Words,
    high: Words | None,
    decimals: int | None,
    out: npt.NDArray[np.float64],
    odd: Mask,
    at: "Places | slice",
) -> None:
    """Numbers of one count of decimals (None: no mark), for the lines `at`."""
    lo, hi = low[at], high[at] if high is not None else None
    if decimals is not None:
        lo, hi = _without_mark(lo, hi, decimals)
    bad = _no_digits(lo)
    value = _eight(lo)
    if hi is not None:
        bad |= _no_digits(hi)
        upper = _eight(hi)
        bad |= upper >= _EXACT
        upper *= np.uint64(100_000_000)
        value += upper
    number = value.astype(np.float64)
    if decimals:
        number /= _POWERS[decimals]
    out[at] = number
    if bad.any():
        odd[at] |= bad


def _keep_last(word: Words, length: Places, reach: int) -> Words:
    """A word that begins `reach` characters before the end, less what is not of the field.

    Characters come out less "0", so that a digit is its value and nothing before it counts.
    """
    word ^= _ZEROS
    shortest, longest = int(length.min()), int(length.max())
    if shortest < reach:
        if shortest == longest:
            word &= _LAST[shortest - reach + 8] if shortest > reach - 8 else np.uint64(0)
        else:
            # Shifted out and in again; a shift by all 64 bits or more leaves 0.
            spare = np.maximum(8 * (reach - length), 0).astype(np.uint64)
            word >>= spare
            word <<= spare
    return word


def _without_mark(lo: Words, hi: Words | None, decimals: int) -> tuple[Words, Words | None]:
    """Take the decimal mark out: what stands before it moves up by one character."""
    eight = np.uint64(8)
    if decimals < 8:
        moved = lo & ~_LAST[decimals + 1]
        moved <<= eight
        moved |= lo & _LAST[decimals]
        if hi is None:
            return moved, None
        moved |= hi >> np.uint64(56)
        return moved, hi << eight
    assert hi is not None  # the mark was seen within the field
    moved = hi & ~_LAST[decimals - 7]
    moved <<= eight
    moved |= hi & _LAST[decimals - 8]
    return lo, moved


def _no_digits(word: Words) -> Mask:
    """Where a word (digits less "0") holds a character that is no digit."""
    beyond = word + _SIX
    beyond |= word
    beyond &= _HIGH_NIBBLES
    return np.asarray(beyond != 0)


def _eight(word: Words) -> Words:
    """Eight digits, the first in the lowest byte, to the number they mean."""
    pairs = word * np.uint64(10)
    pairs += word >> np.uint64(8)
    left = pairs & _PAIRS
    left *= np.uint64(100 + (1_000_000 << 32))
    pairs >>= np.uint64(16)
    pairs &= _PAIRS
    pairs *= np.uint64(1 + (10_000 << 32))
    left += pairs
    left >>= np.uint64(32)
    return left
