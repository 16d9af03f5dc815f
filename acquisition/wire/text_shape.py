"""Text lines, their shape: separator, fields, names, decimal sign, a time column. Found by looking.

Plain lines (`512,498`) are known by their separator. Anything else that keeps the same words around
its numbers (`U:512 I:498`, `u=3.1 V; i=0.2 A`, `{"u":512,"i":498}`) is known by those words.
"""

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from acquisition.stream import clean

NUMBER = rb"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?"
IS_NUMBER = re.compile(NUMBER)
# What a float field may also say; such a set is counted as invalid.
IS_NAN = re.compile(rb"[-+]?(?:nan|inf|infinity)", re.IGNORECASE)
# A number inside a line: not the 1 of ch1, not the tail of another number.
WITHIN = re.compile(rb"(?<![\w.])" + NUMBER + rb"(?!\.?\d)")
SEPARATORS = (b";", b"\t", b"|", b",", b" ", b":", b"/")
SHARE = 0.9  # of the lines must have one shape
FIELD_LIMIT = 33  # 32 channels and a time
# Lines a column must rise steadily for, to be a time without being called one. Half a cycle of
# 50 Hz has fewer at any rate that text can carry.
TIME_LINES = 512
TIME_NAMES = re.compile(
    r"(?:t|time|zeit|temps|tiempo|tempo|timestamp|millis|micros|ms|us|µs|sec|seconds?)"
    r"(?:[ _]*[\[(]?(s|sec|ms|us|µs|millis|micros)[\])]?)?",
    re.IGNORECASE,
)
TIME_UNITS = {
    "s": 1.0,
    "sec": 1.0,
    "second": 1.0,
    "seconds": 1.0,
    "ms": 1e-3,
    "millis": 1e-3,
    "us": 1e-6,
    "µs": 1e-6,
    "micros": 1e-6,
}


@dataclass(frozen=True, slots=True)
class TextShape:
    """How the lines of one stream look."""

    fields: int  # numbers a line, a time among them
    separator: bytes = b","  # b"" when `around` tells
    decimal_comma: bool = False
    trailing: bool = False  # a separator after the last number too
    around: tuple[bytes, ...] = ()  # the words before each number and after the last
    names: tuple[str, ...] = ()  # of all fields, or ()
    units: tuple[str, ...] = ()
    time_column: int | None = None
    time_unit: float | None = None  # seconds per count of the time column
    step: float | None = None  # its usual step, when it is steady
    integer: bool = True
    notes: tuple[str, ...] = ()

    @property
    def channels(self) -> int:
        """Numbers a line that are samples."""
        return self.fields - (self.time_column is not None)


def split(line: bytes, shape: TextShape) -> list[float] | None:
    """The numbers of one line, None when it is off the shape. Slow and strict."""
    if shape.around:
        found = template_pattern(shape).fullmatch(line.strip())
        return [float(value) for value in found.groups()] if found else None
    parts = _parts(line, shape.separator, shape.trailing)
    if len(parts) != shape.fields:
        return None
    values = []
    for part in parts:
        text = part.replace(b",", b".") if shape.decimal_comma else part
        if not IS_NUMBER.fullmatch(text) and not IS_NAN.fullmatch(text):
            return None
        values.append(float(text))
    return values


def template_pattern(shape: TextShape) -> re.Pattern[bytes]:
    """A pattern of a whole line, a group for each number."""
    words = [rb"\s*".join(map(re.escape, word.split())) for word in shape.around]
    number = rb"\s*(" + NUMBER + rb")\s*"
    return re.compile(number.join(words))


def learn(lines: Sequence[bytes]) -> TextShape | None:
    """The shape that at least 90 % of the lines share; None when they are not lines of numbers.

    Args:
        lines: whole lines without their ends, oldest first; words before the numbers begin
            (a header, boot text) are looked at for names and otherwise left aside.
    """
    lines = [line for line in lines if line.strip()]
    numeric = next((k for k, line in enumerate(lines) if _has_numbers(line)), None)
    if numeric is None:
        return None
    # A reset can print a few lines with numbers in them before the samples begin.
    body = lines[numeric:]
    shape = _plain(body) or _template(body)
    if shape is None and len(body) >= 8:
        body = body[len(body) // 2 :]
        shape = _plain(body) or _template(body)
    if shape is None:
        return None
    rows = [row for row in (split(line, shape) for line in body) if row is not None]
    table = np.array(rows)
    head = lines[: len(lines) - len(body)]
    return _finish(shape, table, head, b"".join(body))


def steady_rise(column: np.ndarray) -> float | None:
    """The usual step of a column that only rises, and evenly; else None."""
    steps = np.diff(column)
    if len(steps) < 4 or not np.isfinite(steps).all() or steps.min() <= 0.0:
        return None
    usual = float(np.median(steps))
    # Clock counts jitter by one; a missing line doubles a step, and few may be missing.
    uneven = np.abs(steps - usual) > np.maximum(1.0, 0.25 * usual)
    return usual if np.count_nonzero(uneven) <= 0.1 * len(steps) else None


def may_be_time(lines: Sequence[bytes], shape: TextShape) -> bool:
    """Whether more lines are wanted to tell a time column from samples that happen to rise."""
    if shape.fields < 2 or shape.time_column is not None:
        return False
    rows = [row for row in (split(line, shape) for line in lines) if row is not None]
    return len(rows) < TIME_LINES and steady_rise(np.array(rows)[:, 0]) is not None


def _has_numbers(line: bytes) -> bool:
    """A line whose every field is a number, or whose words frame numbers."""
    for separator in SEPARATORS:
        parts = _parts(line, separator, True)
        if parts and all(IS_NUMBER.fullmatch(p.replace(b",", b".", 1)) for p in parts):
            return True
    return bool(WITHIN.search(line)) and any(sign in line for sign in b":=[{(")


def _parts(line: bytes, separator: bytes, trailing: bool) -> list[bytes]:
    text = line.strip()
    if separator == b" ":
        return text.split()
    parts = [part.strip() for part in text.split(separator)]
    if trailing and parts and not parts[-1]:
        parts.pop()
    return parts


def _plain(lines: Sequence[bytes]) -> TextShape | None:
    best: tuple[float, TextShape] | None = None
    for decimal_comma in (False, True):
        for separator in SEPARATORS:
            if decimal_comma and separator == b",":
                continue
            counts: Counter[tuple[int, bool]] = Counter()
            for line in lines:
                parts = _parts(line, separator, False)
                trailing = len(parts) > 1 and not parts[-1]
                if trailing:
                    parts.pop()
                texts = [p.replace(b",", b".", 1) for p in parts] if decimal_comma else parts
                if texts and all(IS_NUMBER.fullmatch(t) or IS_NAN.fullmatch(t) for t in texts):
                    counts[len(parts), trailing] += 1
            if not counts:
                continue
            (fields, trailing), hits = counts.most_common(1)[0]
            share = hits / len(lines)
            if share < SHARE or fields > FIELD_LIMIT:
                continue
            if best is None or (share, fields) > (best[0], best[1].fields):
                shape = TextShape(fields, separator, decimal_comma, trailing)
                best = (share, shape)
        if best is not None:
            return best[1]
    return None


def _template(lines: Sequence[bytes]) -> TextShape | None:
    counts: Counter[tuple[bytes, ...]] = Counter()
    for line in lines:
        text = line.strip()
        if WITHIN.search(text):
            words = WITHIN.split(text)
            counts[tuple(b" ".join(word.split()) for word in words)] += 1
    if not counts:
        return None
    around, hits = counts.most_common(1)[0]
    fields = len(around) - 1
    if hits < SHARE * len(lines) or fields > FIELD_LIMIT:
        return None
    if not any(sign in word for word in around[:-1] for sign in b':=[{("'):
        return None  # a sentence with a number in it, not a named value
    names = tuple(_name(word) for word in around[:-1])
    if not all(names):
        names = ()
    return TextShape(fields, b"", around=around, names=names)


def _name(word: bytes) -> str:
    found = re.findall(r"[^\W\d_][\w.]*", word.decode("utf-8", "replace"))
    return clean(found[-1], 20) if found else ""


def _finish(shape: TextShape, table: np.ndarray, head: Sequence[bytes], body: bytes) -> TextShape:
    names, units = shape.names, [""] * shape.fields
    notes: list[str] = []
    if not names and head:
        titles = [p.decode("utf-8", "replace") for p in _parts(head[-1], shape.separator, True)]
        if len(titles) == shape.fields:
            names = tuple(clean(title, 40) for title in titles)
    time_column, time_unit = None, None
    for c, name in enumerate(names):
        found = TIME_NAMES.fullmatch(name)
        if found and shape.fields > 1:
            time_column = c
            unit = (found.group(1) or name).lower()
            time_unit = TIME_UNITS.get(unit)
            break
    step = None
    if time_column is not None:
        step = steady_rise(table[:, time_column])
    elif shape.fields > 1 and len(table) >= TIME_LINES:
        step = steady_rise(table[:, 0])
        if step is not None:
            time_column = 0
            notes.append("the first column rises steadily and is taken for a time, not a channel")
    plain_names = []
    for c, name in enumerate(names):
        found = re.fullmatch(r"(.*?)\s*[\[(]([^\])]{1,8})[\])]", name)
        if found and c != time_column:
            units[c] = found.group(2)
            plain_names.append(found.group(1) or f"ch{c + 1}")
        else:
            plain_names.append(name)
    integer = not re.search(rb"[.eE]|[nN][aA][nN]", body) and not shape.decimal_comma
    if shape.around:
        integer = bool(np.all(table == np.rint(table)))
    return TextShape(
        fields=shape.fields,
        separator=shape.separator,
        decimal_comma=shape.decimal_comma,
        trailing=shape.trailing,
        around=shape.around,
        names=tuple(plain_names),
        units=tuple(units),
        time_column=time_column,
        time_unit=time_unit,
        step=step,
        integer=integer,
        notes=tuple(notes),
    )
