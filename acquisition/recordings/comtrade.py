"""COMTRADE (IEEE C37.111-1991, 1999, 2013): a `.cfg` that describes and a `.dat` that holds.

An own reader, because the data are read piece by piece and every claim of the `.cfg` is checked
against the size of the `.dat` first; field order from the standard (from memory, not read) and
checked in tests against an independent reader and real recordings.
"""

import datetime
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from acquisition.block import Block
from acquisition.recordings.faults import absent, damaged, refused
from acquisition.recordings.recording import RecordingOptions
from acquisition.stream import ChannelHint, StreamInfo, clean

SETS_AT_ONCE = 1 << 16
MOST_CHANNELS = 999_999  # six digits in the standard
_TYPES = {"BINARY": "<i2", "BINARY32": "<i4", "FLOAT32": "<f4"}
_MISSING_ASCII = 99999


@dataclass(frozen=True, slots=True)
class _Analog:
    name: str
    unit: str
    gain: float
    offset: float  # value = gain * x + offset
    low: float
    high: float
    side: str
    skew_s: float


@dataclass(frozen=True, slots=True)
class _Config:
    station: str
    revision: int
    analogs: tuple[_Analog, ...]
    digitals: int
    nominal: float | None
    rates: tuple[tuple[float, int], ...]  # (sets a second, last set's number)
    started: str | None
    type: str


class ComtradeRecording:
    """A `.cfg` and its `.dat`."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Read the description and compare it with the data.

        Raises:
            RecordingAbsent, RecordingRefused: see `open_recording`.
        """
        self.path = path
        config = _Reader(path).config()
        self._config = config
        self._data = _data_beside(path)
        self.bytes_total = self._data.stat().st_size
        self._done = 0
        promised = config.rates[-1][1]
        notes: list[str] = []
        if config.type == "ASCII":
            # A line is at least its number, time and one digit a channel.
            most = self.bytes_total // (2 * (2 + len(config.analogs)))
        else:
            most = self.bytes_total // self._record().itemsize
            if self.bytes_total % self._record().itemsize:
                notes.append("the last record of the data is cut short")
        if promised > most:
            notes.append(f"the .cfg promises {promised} sets; the data can hold {most}")
        elif config.type != "ASCII" and promised < most:
            notes.append(f"the .cfg promises {promised} sets; the data hold {most}, all are read")
        self._promised = promised
        rate = options.rate or config.rates[0][0]
        if len({r for r, _ in config.rates}) > 1:
            shown = ", ".join(f"{r:g}" for r, _ in config.rates)
            raise refused(
                path,
                f"changes its sample rate on the way ({shown} Hz)",
                "export one stretch of constant rate, and measure that",
            )
        if rate <= 0.0:
            raise refused(path, "gives no sample rate", "give it with --rate HZ")
        sides = sorted({a.side for a in config.analogs if a.side})
        if sides:
            named = {"P": "primary", "S": "secondary"}
            notes.append(
                "values are " + " and ".join(named.get(s, s) for s in sides) + " ones, as it says"
            )
        self.sets: int | None = min(promised, most) if config.type == "ASCII" else most
        self.info = StreamInfo(
            format="comtrade",
            channels=tuple(
                ChannelHint(
                    name=a.name,
                    unit=a.unit,
                    gain=a.gain,
                    offset_codes=a.offset / a.gain if a.gain else 0.0,
                    skew_s=a.skew_s,
                    step=None if config.type == "FLOAT32" else 1.0,
                )
                for a in config.analogs
            ),
            rate=rate,
            sample_type={"ASCII": "f64", "BINARY": "i16", "BINARY32": "i32"}.get(
                config.type, "f32"
            ),
            nominal_hz=config.nominal,
            started=config.started,
            notes=tuple(notes),
        )

    def blocks(self) -> Iterator[Block]:
        """See Recording."""
        index = lost = 0
        pieces = self._ascii() if self._config.type == "ASCII" else self._binary()
        for codes, good in pieces:
            bounds = np.flatnonzero(
                np.diff(np.concatenate(([False], good, [False])).astype(np.int8))
            )
            done = 0
            for a, b in bounds.reshape(-1, 2).tolist():
                lost += a - done
                done = b
                yield Block(
                    codes=np.ascontiguousarray(codes[:, a:b]),
                    index=index + lost,
                    lost_before=lost,
                    gap_before=lost > 0,
                )
                index += lost + b - a
                lost = 0
            lost += codes.shape[1] - done
        self._done = self.bytes_total
        if index + lost < self._promised:
            raise damaged(
                self._data,
                f"ends after {index + lost} sets; the .cfg promises {self._promised}",
            )

    def bytes_read(self) -> int:
        """See Recording."""
        return self._done

    def close(self) -> None:
        """See Recording."""

    def _record(self) -> np.dtype[np.void]:
        config = self._config
        words = (config.digitals + 15) // 16
        return np.dtype(
            [
                ("n", "<u4"),
                ("t", "<u4"),
                ("x", _TYPES[config.type], (len(config.analogs),)),
                ("d", "<u2", (words,)),
            ]
        )

    def _binary(self) -> Iterator[tuple[npt.NDArray[np.number], npt.NDArray[np.bool_]]]:
        record = self._record()
        missing = {"BINARY": -(2**15), "BINARY32": -(2**31)}.get(self._config.type)
        with self._data.open("rb") as file:
            while data := file.read(SETS_AT_ONCE * record.itemsize):
                rows = np.frombuffer(data, record, len(data) // record.itemsize)
                codes = np.ascontiguousarray(rows["x"].T)
                if missing is None:
                    good = np.isfinite(codes).all(axis=0)
                else:
                    good = (codes != missing).all(axis=0)
                yield codes, np.asarray(good)
                self._done += len(data)

    def _ascii(self) -> Iterator[tuple[npt.NDArray[np.number], npt.NDArray[np.bool_]]]:
        analogs = len(self._config.analogs)
        line = 0
        with self._data.open("rb") as file:
            while True:
                rows: list[list[float]] = []
                for raw in file:
                    line += 1
                    if raw.strip(b"\x1a \r\n"):
                        rows.append(self._fields(raw, line, analogs))
                    if len(rows) >= SETS_AT_ONCE:
                        break
                if not rows:
                    return
                codes = np.array(rows).T
                self._done = file.tell()
                yield codes, np.asarray((codes != _MISSING_ASCII).all(axis=0))

    def _fields(self, raw: bytes, line: int, analogs: int) -> list[float]:
        fields = raw.split(b",")
        try:
            if len(fields) < 2 + analogs:
                raise ValueError
            # A blank value is a missing one.
            return [float(f) if f.strip() else _MISSING_ASCII for f in fields[2 : 2 + analogs]]
        except ValueError:
            raise damaged(
                self._data,
                f"line {line} does not hold {analogs} values: {clean(raw.decode('latin-1'))!r}",
            ) from None


class _Reader:
    """Reads a `.cfg` line by line and knows where it is."""

    def __init__(self, path: Path) -> None:
        self._path = path
        try:
            raw = path.read_bytes()[: 8 << 20]
        except OSError as error:
            raise absent(path, error) from None
        try:
            text = raw.decode("utf-8-sig")
        except UnicodeDecodeError:
            text = raw.decode("latin-1")
        self._lines = text.splitlines()
        self._at = 0

    def config(self) -> _Config:
        """The whole description."""
        head = self._next("station, device, revision")
        revision = 1991
        if len(head) > 2 and head[2]:
            revision = int(self._number(head[2], "revision year"))
        counts = self._next("channel counts")
        total = int(self._number(counts[0], "total channels"))
        analogs = self._count(counts, 1, "A")
        digitals = self._count(counts, 2, "D")
        if analogs + digitals != total:
            raise self._wrong(f"{total} channels are not {analogs} analogue and {digitals} status")
        if analogs == 0:
            raise self._wrong("there is no analogue channel to measure")
        channels = tuple(self._analog() for _ in range(analogs))
        for _ in range(digitals):
            self._next("status channel")
        frequency = self._next("line frequency")
        nominal = self._number(frequency[0], "line frequency") if frequency[0] else 0.0
        count = int(self._number(self._next("number of rates")[0], "number of rates"))
        if not 0 <= count <= 1000:
            raise self._wrong(f"{count} sample rates cannot be")
        rates = []
        for _ in range(max(1, count)):
            rate, last = self._several("sample rate", 2)
            rates.append((self._number(rate, "sample rate"), int(self._number(last, "last set"))))
        started = self._moment(self._next("time of the first sample"))
        self._next("time of the trigger")
        kind = self._next("data type")[0].upper()
        if kind != "ASCII" and kind not in _TYPES:
            raise self._wrong(f"data type {clean(kind, 20)} is not known")
        return _Config(
            station=clean(head[0]),
            revision=revision,
            analogs=_named_apart(channels),
            digitals=digitals,
            nominal=nominal if 40.0 <= nominal <= 70.0 else None,
            rates=tuple(rates),
            started=started,
            type=kind,
        )

    def _analog(self) -> _Analog:
        fields = self._next("analogue channel")
        if len(fields) < 10:
            raise self._wrong(f"an analogue channel has 10 or more fields, here are {len(fields)}")
        name = clean(fields[1]) or f"ch{self._at}"
        gain = self._number(fields[5], "multiplier a")
        offset = self._number(fields[6], "offset b")
        skew = self._number(fields[7], "skew") if fields[7] else 0.0
        side = fields[12][:1].upper() if len(fields) > 12 else ""
        return _Analog(
            name=name,
            unit=clean(fields[4], 12),
            gain=gain,
            offset=offset,
            low=self._number(fields[8], "least value") if fields[8] else 0.0,
            high=self._number(fields[9], "largest value") if fields[9] else 0.0,
            side=side,
            skew_s=skew * 1e-6,
        )

    def _moment(self, fields: list[str]) -> str | None:
        """The first sample's time as ISO 8601; None when it does not read."""
        try:
            first, second, year = (int(n) for n in fields[0].split("/"))
            hour, minute, rest = fields[1].split(":")
            seconds = float(rest)
        except (ValueError, IndexError):
            return None
        # 1991 wrote month/day, later editions day/month.
        day, month = (second, first) if year < 100 or second > 12 else (first, second)
        year += 1900 if year < 100 else 0
        try:
            moment = datetime.datetime(year, month, day, int(hour), int(minute))
        except ValueError:
            return None
        return (moment + datetime.timedelta(seconds=seconds)).isoformat()

    def _count(self, fields: list[str], at: int, letter: str) -> int:
        text = fields[at].upper() if len(fields) > at else ""
        if not text.endswith(letter) or not text[:-1].strip().isdigit():
            raise self._wrong(f"a channel count such as 4{letter} is missing")
        count = int(text[:-1])
        if count > MOST_CHANNELS:
            raise self._wrong(f"{count} channels cannot be")
        return count

    def _several(self, what: str, least: int) -> list[str]:
        fields = self._next(what)
        if len(fields) < least:
            raise self._wrong(f"{what}: {least} fields are needed, here are {len(fields)}")
        return fields

    def _next(self, what: str) -> list[str]:
        if self._at >= len(self._lines):
            self._at += 1
            raise self._wrong(f"ends before the {what}")
        line = self._lines[self._at]
        self._at += 1
        return [field.strip() for field in line.split(",")]

    def _number(self, text: str, what: str) -> float:
        try:
            number = float(text)
        except ValueError:
            raise self._wrong(f"{what} {clean(text, 20)!r} is not a number") from None
        if not abs(number) < 1e15:
            raise self._wrong(f"{what} {clean(text, 20)} is out of range")
        return number

    def _wrong(self, what: str) -> Exception:
        return refused(
            self._path, f"line {self._at}: {what}", "check that this is a whole COMTRADE .cfg"
        )


def _named_apart(channels: tuple[_Analog, ...]) -> tuple[_Analog, ...]:
    """Channels of one name get a number, so that each can be spoken of."""
    import dataclasses

    seen: dict[str, int] = {}
    out = []
    for channel in channels:
        seen[channel.name] = seen.get(channel.name, 0) + 1
        n = seen[channel.name]
        out.append(channel if n == 1 else dataclasses.replace(channel, name=f"{channel.name} #{n}"))
    return tuple(out)


def _data_beside(path: Path) -> Path:
    for suffix in (".dat", ".DAT", ".Dat"):
        candidate = path.with_suffix(suffix)
        if candidate.is_file():
            return candidate
    raise refused(
        path,
        f"has no {path.with_suffix('.dat').name} beside it",
        "a COMTRADE recording is two files; copy both",
    )
