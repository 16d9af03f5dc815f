"""CSV: a header, a time column or a given rate, a column per channel. Read in pieces.

The fast road hands whole pieces to numpy after checking that every line has its separators; a
piece with an offending line is halved until only that line is read by hand. A cell that is no
number (OL, blank, nan) takes its whole set out: a gap, counted.
"""

import datetime
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import numpy.typing as npt

from acquisition.block import Block
from acquisition.recordings.csv_layout import find_layout, value
from acquisition.recordings.faults import absent, damaged, refused
from acquisition.recordings.recording import RecordingOptions
from acquisition.stream import ChannelHint, StreamInfo, clean

Floats = npt.NDArray[np.float64]

PIECE = 4 << 20  # bytes
HEAD = 256 << 10  # bytes looked at to find the layout
LONGEST_LINE = 1 << 20
BY_HAND = 2048  # bytes: smaller pieces are read line by line
GAP_STEPS = 1.5  # a step in time of so many usual ones is a gap


class CsvRecording:
    """A table of samples."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Open it and find its layout and rate.

        Raises:
            RecordingAbsent, RecordingRefused: see `open_recording`.
        """
        self.path = path
        self.sets: int | None = None
        self._done = 0
        try:
            self.bytes_total = path.stat().st_size
            with path.open("rb") as file:
                head = file.read(HEAD)
        except OSError as error:
            raise absent(path, error) from None
        if b"\0" in head[:4096]:
            raise refused(
                path,
                "is binary, not a table",
                "name it by its kind (.wav, .npz), or give --format for captured bytes",
            )
        self._encoding = "utf-8"
        try:
            text = head.decode("utf-8-sig", errors="strict" if len(head) < HEAD else "ignore")
        except UnicodeDecodeError:
            self._encoding = "latin-1"
            text = head.decode("latin-1")
        lines = text.splitlines()
        if len(head) == HEAD and len(lines) > 1:
            lines.pop()  # cut by the reading, not by the file
        self._layout = find_layout(lines[:2000], path)
        self._newline = b"\n" if b"\n" in head else b"\r"
        rate, notes = self._rate(options.rate)
        layout = self._layout
        first = 1 if layout.has_time else 0
        if layout.skipped:
            notes = (f"{len(layout.skipped)} lines before the header were skipped", *notes)
        self._step = 1.0 / rate
        self.info = StreamInfo(
            format="csv",
            channels=tuple(
                ChannelHint(name=name, unit=unit, gain=1.0 if unit else None)
                for name, unit in zip(layout.names[first:], layout.units[first:], strict=True)
            ),
            rate=rate,
            sample_type="float64",
            notes=notes,
        )

    def blocks(self) -> Iterator[Block]:
        """See Recording."""
        layout = self._layout
        index, line, lost = 0, layout.first_line, 0
        last_time: float | None = None
        unknown = False  # time ran backwards: what is missing cannot be counted
        for rows, good, offset in self._pieces():
            self._done = offset
            count = len(good)
            values = rows if not layout.has_time else rows[:, 1:]
            bounds = np.flatnonzero(
                np.diff(np.concatenate(([False], good, [False])).astype(np.int8))
            )
            done = 0
            for a, b in bounds.reshape(-1, 2).tolist():
                lost += a - done
                done = b
                cuts = [a]
                holes = [0]
                if layout.has_time and self._even:
                    times = rows[a:b, 0]
                    steps = np.diff(times, prepend=times[0] - self._step)
                    if last_time is not None:
                        steps[0] = times[0] - last_time - lost * self._step
                    last_time = float(times[-1])
                    odd = np.flatnonzero((steps > GAP_STEPS * self._step) | (steps < -self._step))
                    holes = [0]
                    for at in odd.tolist():
                        hole = round(float(steps[at]) / self._step) - 1
                        if at == 0:
                            holes[0] = hole
                        else:
                            cuts.append(a + at)
                            holes.append(hole)
                for cut, stop, hole in zip(cuts, [*cuts[1:], b], holes, strict=True):
                    unknown = hole < 0
                    missing = lost + max(0, hole)
                    yield Block(
                        codes=np.ascontiguousarray(values[cut:stop].T),
                        index=index + missing,
                        lost_before=None if unknown else missing,
                        gap_before=missing > 0 or unknown,
                    )
                    index += missing + stop - cut
                    lost = 0
            lost += count - done
            line += count
        self._done = self.bytes_total
        if index == 0:
            raise refused(self.path, "has no row in which every cell is a number")
        if lost:
            raise damaged(self.path, f"line {line - lost} and what follows do not read as numbers")

    def bytes_read(self) -> int:
        """See Recording."""
        return self._done

    def close(self) -> None:
        """See Recording."""

    # -- rate -------------------------------------------------------------------------------

    def _rate(self, given: float | None) -> tuple[float, tuple[str, ...]]:
        """The rate from the first piece's time column, or as given."""
        self._even = False
        if not self._layout.has_time:
            if given is None:
                raise refused(
                    self.path,
                    "has no time column, so its sample rate is not known",
                    "give it with --rate HZ",
                )
            return given, ()
        piece = next(self._pieces(), None)
        times = piece[0][piece[1], 0] if piece is not None else np.empty(0)
        if given is not None:
            return given, ()
        if len(times) < 2 or not times[-1] > times[0]:
            raise refused(
                self.path,
                "has a time column from which no sample rate can be told",
                "give the rate with --rate HZ",
            )
        steps = np.diff(times)
        usual = float(np.median(steps))
        if usual <= 0.0:  # times coarser than the samples repeat
            rate = (len(times) - 1) / float(times[-1] - times[0])
            return rate, (f"times repeat; the rate {rate:.6g} Hz is taken from their span",)
        # The longest stretch without a gap tells the rate best.
        cuts = np.flatnonzero((steps > GAP_STEPS * usual) | (steps <= 0.0))
        edges = np.concatenate(([-1], cuts, [len(steps)]))
        k = int(np.argmax(np.diff(edges)))
        a, b = int(edges[k]) + 1, int(edges[k + 1])
        span = float(times[b] - times[a])
        if b <= a or span <= 0.0:
            raise refused(self.path, "has times that jump at every row", "give --rate HZ")
        rate = (b - a) / span
        grid = times[a] + np.arange(b - a + 1) / rate
        off = float(np.max(np.abs(times[a : b + 1] - grid))) * rate
        # Times are printed rounded: a whole number within that rounding is the rate meant.
        if abs(rate - round(rate)) <= max(off, 1e-9) / (b - a) * rate * 2.0 and round(rate) > 0:
            rate = float(round(rate))
        notes: tuple[str, ...] = ()
        self._even = off < 0.5
        if not self._even:
            notes = (
                f"times are uneven by up to {off:.1f} steps; an even rate of {rate:.6g} Hz is used",
            )
        return rate, notes

    # -- lines ------------------------------------------------------------------------------

    def _pieces(self) -> Iterator[tuple[Floats, npt.NDArray[np.bool_], int]]:
        """(rows (n, columns), which of them are good (n,), bytes read)."""
        with self.path.open("rb") as file:
            for _ in range(self._layout.first_line - 1):
                file.readline(LONGEST_LINE)
            rest = b""
            while data := file.read(PIECE):
                data = rest + data
                if self._newline == b"\r":
                    data = data.replace(b"\r", b"\n")
                cut = data.rfind(b"\n") + 1
                if cut == 0:
                    if len(data) > LONGEST_LINE:
                        raise damaged(self.path, "has a line of over a megabyte")
                    rest = data
                    continue
                rest = data[cut:]
                rows, good = self._rows(data[:cut])
                if len(good):
                    yield rows, good, file.tell()
            if rest.strip():
                rows, good = self._rows(rest + b"\n")
                if len(good):
                    yield rows, good, file.tell()

    def _rows(self, data: bytes) -> tuple[Floats, npt.NDArray[np.bool_]]:
        if not self._layout.iso_time:
            quick = self._quick(data)
            if quick is not None:
                return quick, np.isfinite(quick).all(axis=1)
        if len(data) > BY_HAND and not self._layout.iso_time:
            half = data.find(b"\n", len(data) // 2) + 1
            if 0 < half < len(data):
                first, first_good = self._rows(data[:half])
                second, second_good = self._rows(data[half:])
                return np.concatenate((first, second)), np.concatenate((first_good, second_good))
        return self._by_hand(data)

    def _quick(self, data: bytes) -> Floats | None:
        """Every line by numpy at once; None when one of them is not as it should be."""
        layout = self._layout
        if b'"' in data or b"\n\n" in data or b"\n\r\n" in data or b" " in data:
            return None
        if b"\r" in data:
            data = data.replace(b"\r", b"")
        if layout.decimal == ",":
            data = data.replace(b",", b".")
        if layout.separator != ",":
            data = data.replace(layout.separator.encode(), b",")
        if not data.endswith(b"\n"):
            return None
        raw = np.frombuffer(data, np.uint8)
        ends = np.flatnonzero(raw == 10)
        commas = np.flatnonzero(raw == 44)
        n = len(ends)
        # Commas before each line end: any line with one too many or few breaks the ladder.
        seen = np.searchsorted(commas, ends)
        if not np.array_equal(seen, (layout.columns - 1) * np.arange(1, n + 1)):
            return None
        try:
            values = np.fromstring(data.replace(b"\n", b",")[:-1].decode("ascii"), sep=",")
        except (ValueError, UnicodeDecodeError):
            return None
        if len(values) != n * layout.columns:
            return None
        rows = values.reshape(n, layout.columns)
        if layout.time_unit not in (None, 1.0):
            rows[:, 0] *= layout.time_unit
        return rows

    def _by_hand(self, data: bytes) -> tuple[Floats, npt.NDArray[np.bool_]]:
        layout = self._layout
        lines = [
            line for line in data.decode(self._encoding, "replace").split("\n") if line.strip()
        ]
        rows = np.full((len(lines), layout.columns), np.nan)
        for n, line in enumerate(lines):
            fields = line.rstrip("\r").split(layout.separator)
            if len(fields) == layout.columns + 1 and not fields[-1].strip():
                fields.pop()
            if len(fields) != layout.columns:
                continue
            for c, field in enumerate(fields):
                number = (
                    _seconds_of_day_and_date(field)
                    if c == 0 and layout.iso_time
                    else value(field, layout.decimal)
                )
                if number is not None:
                    rows[n, c] = number
        if layout.time_unit not in (None, 1.0):
            rows[:, 0] *= layout.time_unit
        return rows, np.asarray(np.isfinite(rows).all(axis=1))


def _seconds_of_day_and_date(text: str) -> float | None:
    try:
        moment = datetime.datetime.fromisoformat(clean(text.strip().strip('"'), 40))
    except ValueError:
        return None
    if moment.tzinfo is None:
        moment = moment.replace(tzinfo=datetime.UTC)
    # Whole days apart keep a float's digits for the fraction.
    return (moment - datetime.datetime(2000, 1, 1, tzinfo=datetime.UTC)).total_seconds()
