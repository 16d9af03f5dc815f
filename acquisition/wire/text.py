r"""Text lines: decoder and encoder. The format of a first logger, and the one that hides damage.

About 29 in 100 damaged lines still read as numbers in range, so loss is unknown here, never 0.
The fast road reads a whole chunk of lines with one numpy call, after one vector pass has dropped
the lines off the locked shape; what numpy refuses goes line by line.
"""

import re
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from acquisition.accounting import Tally
from acquisition.block import Block, BlockFlag
from acquisition.stream import ChannelHint, StreamInfo, clean
from acquisition.wire.text_shape import TextShape, learn, may_be_time, split, template_pattern

LINE_LIMIT = 2048  # bytes; 33 fields of 20 are 693, a longer line is none
LEARN_LINES = 16  # lines to lock a shape on, doubled when they do not agree
LEARN_LIMIT = 1024
# An int64 holds 18 digits and numpy turns more into -1 without a word; 15 stay exact as floats.
DIGITS = 15
MAYBE_TIME = "the first column rises steadily and may be a time, not a channel"
LOST_SHAPE = 100  # lines off the shape in a row, before it is said aloud
NUMBER_BEGINS = tuple(bytes([c]) for c in b"+-.0123456789")
COMMA, NEWLINE, POINT, NINE, SLASH = ord(","), ord("\n"), ord("."), ord("9"), ord("/")
PLUS, MINUS = ord("+"), ord("-")


class TextDecoder:
    """Decodes lines of numbers; see `acquisition.wire.decoder.Decoder`."""

    def __init__(self, rate: float | None = None) -> None:
        self.info: StreamInfo | None = None
        self.problem = ""
        self.shape: TextShape | None = None
        self._rate = rate
        self._tail = b""
        self._overlong = False
        self._first_line = True  # since the link opened: most likely cut
        self._learning: list[bytes] = []
        self._next_try = LEARN_LINES
        self._position = 0
        self._gap = False
        self._flags = BlockFlag.NONE
        self._off_shape = 0  # in a row
        self._last_time: float | None = None
        self._tally = {"received": 0, "bad": 0, "bytes": 0, "invalid": 0, "reconnects": 0}

    @property
    def tally(self) -> Tally:
        """The account so far; `lost` is unknown."""
        t = self._tally
        return Tally(
            received=t["received"],
            lost=None,
            bad_frames=t["bad"],
            discarded_bytes=t["bytes"],
            invalid_sets=t["invalid"],
            reconnects=t["reconnects"],
        )

    def feed(self, data: bytes, arrived: float) -> list[Block]:
        """Decode the lines that are whole by now."""
        text = self._tail + data
        # A carriage return ends a line at once; the newline after it is then an empty line.
        text = text.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
        cut = text.rfind(b"\n") + 1
        whole, self._tail = text[:cut], text[cut:]
        blocks: list[Block] = []
        if whole:
            blocks = self._lines(whole, arrived)
        if len(self._tail) > LINE_LIMIT or (self._overlong and self._tail):
            self._tally["bytes"] += len(self._tail)
            self._tail = b""
            self._overlong = True
        return blocks

    def reconnected(self) -> None:
        """The link is back: the line in hand is lost, and who knows what else."""
        self._tally["bytes"] += len(self._tail)
        self._tally["reconnects"] += 1
        self._tail = b""
        self._overlong = False
        self._first_line = True
        self._gap = True
        self._last_time = None
        self._flags |= BlockFlag.RECONNECT

    def finish(self) -> list[Block]:
        """The stream has ended: learn from what there is. An unended last line may be cut."""
        self._tally["bytes"] += len(self._tail)
        self._tail = b""
        if self.shape is None and self._learning and self._lock(at_end=True):
            return self._relearned([], float("nan"))
        return []

    def _lines(self, whole: bytes, arrived: float) -> list[Block]:
        if self._overlong:  # the end of a line that was given up
            end = whole.index(b"\n") + 1
            self._tally["bytes"] += end
            self._tally["bad"] += 1
            self._gap = True
            self._overlong = False
            self._first_line = False
            whole = whole[end:]
        while b"\n\n" in whole:  # a few plain passes; a pattern takes longer than all the rest
            whole = whole.replace(b"\n\n", b"\n")
        whole = whole.lstrip(b"\n")
        if self._first_line and whole:
            end = whole.index(b"\n")
            self._first_line = False
            if self.shape is None and whole[:end].strip()[:1] not in NUMBER_BEGINS:
                pass  # words: perhaps the header
            else:
                self._tally["bytes"] += end + 1
                whole = whole[end + 1 :]
        if not whole:
            return []
        if self.shape is not None:
            return self._decode(whole, arrived)
        lines = whole[:-1].split(b"\n")
        for k, line in enumerate(lines):
            self._learning.append(line[:LINE_LIMIT])
            if len(self._learning) >= self._next_try and self._lock():
                return self._relearned(lines[k + 1 :], arrived)
        return []

    def _lock(self, at_end: bool = False) -> bool:
        """Try to learn the shape from the lines in hand."""
        shape = learn(self._learning)
        if shape is not None and at_end and may_be_time(self._learning, shape):
            shape = replace(shape, notes=(*shape.notes, MAYBE_TIME))
        elif shape is not None and len(self._learning) < LEARN_LIMIT:
            # A column that rises is watched until it falls or has shown to be a time.
            shape = None if may_be_time(self._learning, shape) else shape
        if shape is not None:
            self.shape = shape
            self._describe(shape)
            return True
        self._next_try = len(self._learning) * 2
        if self._next_try > LEARN_LIMIT:
            if learn(self._learning) is None:
                first = clean(self._learning[-1].decode("utf-8", "replace"), 60)
                self.problem = f"lines of text came, but not of numbers; one reads: {first}"
                half = len(self._learning) // 2
                self._drop(self._learning[:half])
                del self._learning[:half]
            self._next_try = LEARN_LIMIT
        return False

    def _relearned(self, rest: Sequence[bytes], arrived: float) -> list[Block]:
        lines = [*self._learning, *rest]
        self._learning = []
        self.problem = ""
        assert self.shape is not None
        # Words before the first numbers are no damage.
        begin = next((k for k, line in enumerate(lines) if split(line, self.shape)), len(lines))
        self._tally["bytes"] += sum(len(line) + 1 for line in lines[:begin])
        if begin == len(lines):
            return []
        return self._decode(b"\n".join(lines[begin:]) + b"\n", arrived)

    def _drop(self, lines: Sequence[bytes]) -> None:
        self._tally["bytes"] += sum(len(line) + 1 for line in lines)
        self._tally["bad"] += len(lines)

    def _describe(self, shape: TextShape) -> None:
        hints: list[ChannelHint] = []
        for c in range(shape.fields):
            if c == shape.time_column:
                continue
            name = shape.names[c] if c < len(shape.names) else ""
            unit = shape.units[c] if c < len(shape.units) else ""
            hints.append(
                ChannelHint(
                    name=name or f"ch{len(hints) + 1}",
                    unit=clean(unit, 12),
                    gain=1.0 if unit else None,
                    step=1.0 if shape.integer else None,
                )
            )
        rate = self._rate
        if rate is None and shape.step and shape.time_unit:
            rate = 1.0 / (shape.step * shape.time_unit)
        self.info = StreamInfo(
            format="text",
            channels=tuple(hints),
            rate=rate,
            sample_type="text",
            notes=shape.notes,
        )

    def _decode(self, whole: bytes, arrived: float) -> list[Block]:
        assert self.shape is not None
        values, good = read_lines(whole, self.shape)
        lines = len(good)
        numbers = np.flatnonzero(good)
        bad = lines - len(numbers)
        if bad:
            ends = np.flatnonzero(np.frombuffer(whole, np.uint8) == NEWLINE)
            lengths = np.diff(ends, prepend=-1)
            self._tally["bad"] += bad
            self._tally["bytes"] += int(lengths[~good].sum())
            self._off_shape = (
                lines - 1 - int(numbers[-1]) if len(numbers) else self._off_shape + bad
            )
            if self._off_shape >= LOST_SHAPE:
                line = whole[:-1].rsplit(b"\n", 1)[-1].decode("utf-8", "replace")
                self.problem = (
                    f"lines no longer hold {self.shape.fields} numbers each;"
                    f" the last reads: {clean(line, 60)}"
                )
        else:
            self._off_shape = 0
        if values.dtype.kind == "f":
            finite = np.isfinite(values).all(axis=1)
            if not finite.all():
                self._tally["invalid"] += int(np.count_nonzero(~finite))
                values, numbers = values[finite], numbers[finite]
        blocks = self._blocks(values, numbers, arrived)
        if lines and (not len(numbers) or numbers[-1] != lines - 1):
            self._gap = True
        self._position += lines
        return blocks

    def _blocks(
        self, values: npt.NDArray[np.generic], numbers: npt.NDArray[np.intp], arrived: float
    ) -> list[Block]:
        """Cut at every missing line and at every jump of the time column."""
        shape = self.shape
        assert shape is not None
        if not len(numbers):
            return []
        broken = np.diff(numbers, prepend=-1) != 1
        if shape.time_column is not None:
            times = values[:, shape.time_column].astype(np.float64)
            values = np.delete(values, shape.time_column, axis=1)
            if shape.step is not None:
                before = times[0] - shape.step if self._last_time is None else self._last_time
                steps = np.diff(times, prepend=before)
                broken |= steps > 1.5 * shape.step + 1.0 * (shape.step >= 2.0)
            self._last_time = float(times[-1])
        broken[0] |= self._gap
        cuts = np.flatnonzero(broken)
        starts = cuts.tolist() if len(cuts) and cuts[0] == 0 else [0, *cuts.tolist()]
        blocks = []
        for begin, end in zip(starts, [*starts[1:], len(values)], strict=True):
            gap = bool(broken[begin])
            blocks.append(
                Block(
                    codes=values[begin:end].T,  # type: ignore[arg-type]
                    index=self._position + int(numbers[begin]),
                    lost_before=None if gap else 0,
                    gap_before=gap,
                    arrived=arrived,
                    flags=self._flags,
                )
            )
            self._flags = BlockFlag.NONE
        self._tally["received"] += len(values)
        self._gap = False
        self.problem = ""
        return blocks


def read_lines(
    whole: bytes, shape: TextShape
) -> tuple[npt.NDArray[np.generic], npt.NDArray[np.bool_]]:
    """Numbers of the lines on the shape, and which lines those are.

    Args:
        whole: lines, each ended by a newline; none empty.
    Returns:
        (good lines, fields) int64 or float64, and (lines,) booleans.
    """
    if shape.around:
        return _read_templates(whole, shape)
    text = _canonical(whole, shape)
    letters = np.frombuffer(text, np.uint8)
    marks = np.flatnonzero((letters == COMMA) | (letters == NEWLINE))
    ends = np.flatnonzero(letters[marks] == NEWLINE)
    good = np.diff(ends, prepend=-1) == shape.fields
    if not good.all():
        lengths = np.diff(marks[ends], prepend=-1)
        text = letters[np.repeat(good, lengths)].tobytes()
        letters = np.frombuffer(text, np.uint8)
        marks = np.flatnonzero((letters == COMMA) | (letters == NEWLINE))
    if not len(marks):
        return np.empty((0, shape.fields), np.int64), good
    values = None
    if int(np.diff(marks, prepend=-1).max()) <= DIGITS + 1:
        values = _fast(text, letters, marks)
    if values is not None and len(values) == len(marks):
        return values.reshape(-1, shape.fields), good
    # Something numpy refuses: line by line, strictly.
    plain = TextShape(shape.fields)
    rows = []
    which = np.flatnonzero(good)
    for k, line in zip(which, text[:-1].split(b"\n"), strict=True):
        row = split(line, plain)
        if row is None:
            good[k] = False
        else:
            rows.append(row)
    return np.array(rows, np.float64).reshape(-1, shape.fields), good


def _canonical(whole: bytes, shape: TextShape) -> bytes:
    """The same lines with comma and point."""
    text = whole
    if shape.separator in (b" ", b"\t"):
        if shape.separator == b" ":
            text = re.sub(rb"[ \t]*\n[ \t]*", b"\n", text).lstrip(b" \t")
            if shape.decimal_comma:
                text = text.replace(b",", b".")
            return re.sub(rb"[ \t]+", b",", text)
        text = text.translate(bytes.maketrans(b",\t", b".,") if shape.decimal_comma else _TAB)
    elif shape.separator != b",":
        old = b"," + shape.separator if shape.decimal_comma else shape.separator
        text = text.translate(bytes.maketrans(old, b".," if shape.decimal_comma else b","))
    return re.sub(rb",[ \t]*\n", b"\n", text) if shape.trailing else text


_BLANK_FIELD = re.compile(rb",[ \t]+(?:,|$)|^[ \t]+,")
_TAB = bytes.maketrans(b"\t", b",")


def _fast(
    text: bytes, letters: npt.NDArray[np.uint8], marks: npt.NDArray[np.intp]
) -> npt.NDArray[np.generic] | None:
    """All numbers at once, or None when numpy refuses one."""
    signs = np.flatnonzero((letters == PLUS) | (letters == MINUS))
    if len(signs):
        after_sign = letters[signs + 1]  # a newline at the end is always there
        if ((after_sign < POINT) | (after_sign > NINE) | (after_sign == SLASH)).any():
            return None  # numpy reads a sign alone as 0
    points = np.flatnonzero(letters == POINT)
    decimals = 0
    if len(points):
        # The same number of decimals everywhere: read as integers, six times as fast.
        if len(points) != len(marks) or b"e" in text or b"E" in text:
            return _from_text(text, np.float64)
        after = marks - points - 1
        decimals = int(after[0])
        if decimals < 1 or (after != decimals).any():
            return _from_text(text, np.float64)
        text = text.translate(None, b".")
    values = _from_text(text, np.int64)
    if values is None:
        return None if decimals or len(points) else _from_text(text, np.float64)
    return values.astype(np.float64) / 10.0**decimals if len(points) else values


def _from_text(text: bytes, kind: type[np.number]) -> npt.NDArray[np.generic] | None:
    joined = text.replace(b"\n", b",")
    if (b" " in joined or b"\t" in joined) and _BLANK_FIELD.search(joined):
        return None  # numpy reads a field of blanks as a number
    try:
        return np.fromstring(joined, dtype=kind, sep=",")
    except ValueError:
        return None


def _read_templates(
    whole: bytes, shape: TextShape
) -> tuple[npt.NDArray[np.generic], npt.NDArray[np.bool_]]:
    pattern = template_pattern(shape)
    lines = whole[:-1].split(b"\n")
    good = np.zeros(len(lines), np.bool_)
    rows = []
    for k, line in enumerate(lines):
        found = pattern.fullmatch(line.strip())
        if found is not None:
            rows.append([float(value) for value in found.groups()])
            good[k] = True
    return np.array(rows, np.float64).reshape(-1, shape.fields), good


def encode_text(
    codes: npt.NDArray[np.generic],
    *,
    separator: str = ",",
    ending: str = "\r\n",
    names: Sequence[str] = (),
    decimals: int | None = None,
) -> bytes:
    """Lines as a logger prints them; with `names`, as name:value pairs.

    Args:
        codes: (channels, sets).
        decimals: digits after the point; None prints integers.
    """
    lines = []
    for row in np.asarray(codes).T.tolist():
        parts = [str(v) if decimals is None else f"{v:.{decimals}f}" for v in row]
        if names:
            parts = [f"{name}:{part}" for name, part in zip(names, parts, strict=True)]
        lines.append(separator.join(parts) + ending)
    return "".join(lines).encode()
