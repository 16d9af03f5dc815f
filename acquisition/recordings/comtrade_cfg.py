"""The description of a COMTRADE recording (IEEE C37.111-1991, 1999, 2013): the .cfg, or that
section of a .cff.

The order of the fields is from memory of the standard, not read; tests compare with an
independent reader and real recordings. Every error names the file, the line and the field.
"""

import datetime
import math
import re
from dataclasses import dataclass
from typing import NoReturn

from acquisition.recordings.readable import refused
from acquisition.stream import clean

TYPES = ("ASCII", "BINARY", "BINARY32", "FLOAT32")
MOST_CHANNELS = 9999
MOST_RATES = 999
_PREFIXES = {"M": 1e6, "k": 1e3, "K": 1e3, "m": 1e-3, "u": 1e-6, "µ": 1e-6, "μ": 1e-6, "": 1.0}


@dataclass(frozen=True, slots=True)
class Analog:
    """An analogue channel: value = a * x + b, in `unit` times `worth`."""

    name: str
    unit: str  # without prefix
    worth: float  # of the prefix: 1000 for kV
    a: float
    b: float
    skew_s: float
    low: float  # least and largest possible x, as written
    high: float
    primary: float | None  # the transformer's two sides, where told
    secondary: float | None
    side: str  # "P", "S" or ""


@dataclass(frozen=True, slots=True)
class Description:
    """What a .cfg says."""

    station: str
    revision: int
    analogs: tuple[Analog, ...]
    status: int  # how many status channels
    nominal: float | None  # Hz
    rates: tuple[tuple[float, int], ...]  # (sets a second, number of the last set); 0: by time
    started: str | None
    type: str
    time_unit: float  # s, of the times beside the samples


def read_description(text: str, name: str, first_line: int = 1) -> Description:
    """Read a description.

    Args:
        text: of the .cfg, or of its section in a .cff.
        name: what to call the file in a sentence.
        first_line: number of the text's first line in its file.
    Raises:
        RecordingRefused: it is no such description; names line and field.
    """
    reader = _Lines(text, name, first_line)
    head = reader.next("station", 1)
    revision = reader.whole(2, "revision year", 1991, 9999) if len(head) > 2 and head[2] else 1991
    reader.next("channel counts", 3)
    total = reader.whole(0, "total of channels", 0, MOST_CHANNELS)
    analog_count = reader.count(1, "analogue channels", "A")
    status = reader.count(2, "status channels", "D")
    if analog_count + status != total:
        reader.wrong(0, f"{total} channels are not {analog_count} analogue and {status} status")
    if analog_count == 0:
        reader.wrong(1, "there is no analogue channel, so nothing to measure")
    analogs = tuple(_analog(reader) for _ in range(analog_count))
    for _ in range(status):
        reader.next("status channel", 1)
    frequency = reader.next("line frequency", 1)
    nominal = reader.number(0, "line frequency") if frequency[0] else 0.0
    reader.next("number of sample rates", 1)
    count = reader.whole(0, "number of sample rates", 0, MOST_RATES)
    rates = tuple(_rate(reader) for _ in range(max(1, count)))
    started = _moment(reader.next("time of the first sample", 1), revision)
    reader.next("time of the trigger", 1)
    kind = reader.next("file type", 1)[0].upper()
    if kind not in TYPES:
        reader.wrong(0, f"the file type {clean(kind, 20)} is not one of {', '.join(TYPES)}")
    multiplier = 1.0
    if revision > 1991 and reader.more() and reader.next("time multiplier", 1)[0]:
        multiplier = reader.number(0, "time multiplier")
    return Description(
        station=clean(head[0]),
        revision=revision,
        analogs=analogs,
        status=status,
        nominal=nominal if 40.0 <= nominal <= 70.0 else None,
        rates=rates,
        started=started,
        type=kind,
        time_unit=1e-6 * multiplier if multiplier > 0.0 else 1e-6,
    )


def _analog(reader: "_Lines") -> Analog:
    fields = reader.next("analogue channel", 10)
    unit, worth = _bare(fields[4])
    more = len(fields) >= 13
    return Analog(
        name=clean(fields[1]) or clean(" ".join(fields[2:4])),
        unit=unit,
        worth=worth,
        a=reader.number(5, "multiplier a"),
        b=reader.number(6, "offset b"),
        skew_s=1e-6 * reader.number(7, "skew") if fields[7] else 0.0,
        low=reader.number(8, "least value") if fields[8] else -math.inf,
        high=reader.number(9, "largest value") if fields[9] else math.inf,
        primary=reader.number(10, "primary") if more and fields[10] else None,
        secondary=reader.number(11, "secondary") if more and fields[11] else None,
        side=fields[12][:1].upper() if more and fields[12][:1].upper() in ("P", "S") else "",
    )


def _bare(unit: str) -> tuple[str, float]:
    """A unit without its prefix, and what that is worth."""
    found = re.fullmatch(r"([MkKmuµμ]?)([VvAa])(?:rms|RMS|olts?|mps?)?", unit)
    if found is None:
        return clean(unit, 12), 1.0
    return found[2].upper(), _PREFIXES[found[1]]


def _rate(reader: "_Lines") -> tuple[float, int]:
    reader.next("sample rate", 2)
    rate = reader.number(0, "sample rate")
    if rate < 0.0:
        reader.wrong(0, f"a sample rate of {rate:g} cannot be")
    return rate, reader.whole(1, "number of the last set", 0, 10**12)


def _moment(fields: list[str], revision: int) -> str | None:
    """The first sample's time as ISO 8601; None where it does not read as a time."""
    try:
        first, second, year = (int(part) for part in fields[0].split("/"))
        hour, minute, seconds = fields[1].split(":")
        whole, _, fraction = seconds.partition(".")
        day, month = (second, first) if revision <= 1991 else (first, second)
        if month > 12:  # written the other way round
            day, month = month, day
        if year < 100:
            year += 1900 if year >= 70 else 2000
        moment = datetime.datetime(year, month, day, int(hour), int(minute), int(whole))
    except (ValueError, IndexError, OverflowError):
        return None
    return moment.isoformat() + (f".{fraction}" if fraction.isdigit() else "")


class _Lines:
    """The lines of a description, one after the other, and where reading stands."""

    def __init__(self, text: str, name: str, first_line: int) -> None:
        self._lines = text.splitlines()
        self._name = name
        self._line = first_line - 1
        self._at = 0
        self._fields: list[str] = []

    def more(self) -> bool:
        """Whether there is another line."""
        return self._at < len(self._lines)

    def next(self, what: str, least: int) -> list[str]:
        """The fields of the next line."""
        if not self.more():
            raise refused(
                f"{self._name} ends after line {self._line}, before the {what}", _WHOLE, _KIND
            )
        self._fields = [field.strip() for field in self._lines[self._at].split(",")]
        self._at += 1
        self._line += 1
        if len(self._fields) < least:
            raise refused(
                f"{self._name} line {self._line} ({what}) has {len(self._fields)}"
                f" field{'s' if len(self._fields) > 1 else ''} and needs {least}:"
                f" {clean(self._lines[self._at - 1])}",
                _WHOLE,
                _KIND,
            )
        return self._fields

    def number(self, at: int, what: str) -> float:
        """Field `at` of this line."""
        try:
            value = float(self._fields[at])
        except ValueError:
            value = math.nan
        if not math.isfinite(value):
            self.wrong(at, f"{what} {clean(self._fields[at], 20)!r} is not a number")
        return value

    def whole(self, at: int, what: str, least: int, most: int) -> int:
        """Field `at` of this line as a whole number within bounds."""
        text = self._fields[at]
        if not re.fullmatch(r"\d{1,15}", text) or not least <= int(text) <= most:
            self.wrong(at, f"{what} {clean(text, 20)!r} is not a number from {least} to {most}")
        return int(text)

    def count(self, at: int, what: str, letter: str) -> int:
        """A count with its letter, such as 4A."""
        found = re.fullmatch(rf"(\d{{1,4}})\s*{letter}", self._fields[at], re.IGNORECASE)
        if found is None:
            text = clean(self._fields[at], 20)
            self.wrong(at, f"the count of {what} {text!r} does not read as 4{letter}")
        return int(found[1])

    def wrong(self, at: int, what: str) -> NoReturn:
        """Refuse field `at` of this line."""
        raise refused(f"{self._name} line {self._line}, field {at + 1}: {what}", _WHOLE, _KIND)


_WHOLE = "check that the .cfg is whole and belongs to a COMTRADE recording"
_KIND = "a comma inside a name shifts all fields behind it; take it out"
