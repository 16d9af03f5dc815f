"""Tables of samples: CSV, TSV, text with a time column or with a rate told by the person.

A piece of whole lines goes through the fast road (`csv_numbers`); lines that it leaves are read
one by one here. A set with a cell that is no number is dropped and becomes a gap, and so is what
the time column shows to be missing; nothing is bridged.
"""

import math
from collections.abc import Iterator
from dataclasses import replace
from datetime import datetime
from pathlib import Path

import numpy as np
import numpy.typing as npt

from acquisition.block import Block
from acquisition.errors import RecordingDamaged
from acquisition.recordings.csv_layout import TimeKind, find_layout
from acquisition.recordings.csv_lines import TextFile
from acquisition.recordings.csv_numbers import parse
from acquisition.recordings.csv_reading import number, split
from acquisition.recordings.csv_slow import read_slowly
from acquisition.recordings.placing import Placer
from acquisition.recordings.readable import damaged, refused, shown, size_of, unreadable
from acquisition.recordings.recording import RecordingOptions
from acquisition.recordings.timing import (
    FIRST_STEPS,
    Timing,
    clocks,
    find_timing,
    missing,
    other_step,
    refined,
    stamps,
    undisturbed,
)
from acquisition.stream import ChannelHint, StreamInfo, clean

Floats = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]

PIECES_LOOKED_AT = 256  # for times, when most lines have none
MANY_RAGGED = 200  # lines without the right count of fields, more than half of a piece: no table


class CsvRecording:
    """A table as Blocks of float64 in the units of its header."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Find the layout and the rate.

        Raises:
            RecordingAbsent, RecordingRefused: not to be read, no table, two readings fit, or the
                rate must be told.
        """
        self.path = path
        self.sets: int | None = None
        self.bytes_total = size_of(path)
        self._name = shown(path)
        try:
            self._file = TextFile(path)
            self._refuse_binary()
            lines = self._file.head_lines()
        except OSError as error:
            raise unreadable(path, error) from None
        self._layout = find_layout(lines, self._name)
        self._origin: datetime | None = None
        self._timing: Timing | None = None
        notes = list(self._layout.notes)
        if self._layout.undecided:
            self._decide()
        rate = self._rate(options, notes)
        if rate < 200.0:
            notes.append(f"{rate:.6g} sets a second is too slow to show a mains wave; is it right?")
        self.info = StreamInfo(
            format="csv",
            channels=tuple(
                ChannelHint(name=one, unit=unit, gain=1.0)
                for one, unit in zip(self._layout.names, self._layout.units, strict=True)
            ),
            rate=rate,
            sample_type="float64",
            started=self._started(lines),
            notes=tuple(notes),
        )

    def blocks(self) -> Iterator[Block]:
        """Blocks in order. Raises RecordingDamaged where it stops being such a table."""
        placer = Placer()
        before: float | None = None
        dropped = 0  # lines at the end of the pieces before
        for line, table, times, good in self._tables():
            if not dropped and good.all() and self._plainly_follow(times, before):
                before = None if times is None else float(times[-1])
                yield placer.place(table)
                continue
            at = np.flatnonzero(good)
            if len(at) == 0:
                dropped += len(good)
                continue
            # Lines dropped before each good one; the time column may know of more.
            lost = np.diff(at, prepend=-1 - dropped) - 1
            dropped = len(good) - 1 - int(at[-1])
            other: tuple[int, float] | None = None
            if times is not None and self._timing is not None:
                times = times[at]
                other = other_step(self._timing, times)
                if other is not None:
                    at, times, lost = (
                        at[: other[0] + 1],
                        times[: other[0] + 1],
                        lost[: other[0] + 1],
                    )
                told = missing(self._timing, times, before)
                before = float(times[-1])
                lost = np.where(told < 0, -1, np.maximum(lost, told))
            yield from _between_gaps(placer, table, at, lost)
            if other is not None:
                raise self._steps_otherwise(line + int(at[-1]), other[1])
        if self._ragged_end:
            raise damaged(
                f"{self._name} is cut short in line {self._ragged_end}",
                "what is before it was read",
            )

    def bytes_read(self) -> int:
        """How far reading has come."""
        return self._file.bytes_read

    def close(self) -> None:
        """Nothing stays open between two pieces."""

    def _plainly_follow(self, times: Floats | None, before: float | None) -> bool:
        if times is None or self._timing is None:
            return True
        return undisturbed(self._timing, times, before)

    # -- the rate ---------------------------------------------------------------------------

    def _rate(self, options: RecordingOptions, notes: list[str]) -> float:
        layout = self._layout
        own: float | None = None
        if layout.time_kind is TimeKind.NUMBER:
            self._timing = Timing(1.0)
        elif layout.time_at is not None:
            known = self._first_times()
            timing = find_timing(known) if len(known) > 1 else None
            if timing is not None and not timing.exact:
                timing = self._refined(timing, float(known[0]))
            if timing is not None:
                self._timing = timing
                own = timing.rate
                if timing.note:
                    notes.append(timing.note)
        if options.rate is not None:
            if own is not None and abs(own / options.rate - 1.0) > 1e-6:
                notes.append(f"--rate {options.rate:.10g} is used; the times say {own:.6g} Hz.")
            return options.rate
        if own is not None:
            return own
        what = (
            "has no time column"
            if layout.time_at is None or layout.time_kind is TimeKind.NUMBER
            else "has times from which no rate can be told"
        )
        raise refused(f"{self._name} {what}", "tell the rate, for example: --rate 8000")

    def _first_times(self) -> Floats:
        """Times of the first lines, of sets with bad cells too."""
        known = np.empty(0)
        for looked, (_, _, times, _) in enumerate(self._tables()):
            if times is not None:
                known = np.concatenate((known, times[np.isfinite(times)]))
            if len(known) > FIRST_STEPS or looked > PIECES_LOOKED_AT:
                break
        return known

    def _refined(self, timing: Timing, first: float) -> Timing:
        """The rate from the whole file, where the first lines tell it only roughly."""
        fields = split(self._file.last_line(), self._layout.separator)
        at = self._layout.time_at
        if at is None or at >= len(fields) or self._layout.time_kind is TimeKind.CLOCK:
            return timing
        if self._layout.time_kind is TimeKind.STAMP:
            last = float(stamps([fields[at]], self._origin)[0][0])
        else:
            value = number(fields[at], self._layout.decimal)
            last = math.nan if value is None else value * self._layout.time_unit
        lines = self._file.count_lines() - self._layout.first_line + 1
        return refined(timing, lines, first, last)

    def _started(self, lines: list[str]) -> str | None:
        if self._layout.time_kind is not TimeKind.STAMP:
            return None
        cell = split(lines[self._layout.first_line - 1], self._layout.separator)[0]
        return clean(cell.replace(",", ".").replace(" ", "T", 1))

    def _refuse_binary(self) -> None:
        head = self._file.head
        if self._file.wide:
            return
        odd = sum(byte < 32 and byte not in b"\t\n\r\f\x1a" for byte in head[:4096])
        if b"\0" in head or odd > len(head[:4096]) // 20:
            raise refused(
                f"{self._name} is named as text but holds binary data"
                f" (first bytes {head[:8].hex(' ')})",
                "if it is what a logger sent, try --format crestwire or --format raw",
            )

    def _decide(self) -> None:
        """No number in the first lines had a decimal mark: look for a comma further on."""
        layout = self._layout
        if layout.separator == "," or self._file.wide:
            return
        for number_, piece in enumerate(self._file.pieces()):
            text = piece if number_ else b"\n".join(piece.split(b"\n")[layout.first_line - 1 :])
            comma, point = text.find(b","), text.find(b".")
            if comma >= 0 and (point < 0 or comma < point):
                self._layout = replace(layout, decimal=",")
            if comma >= 0 or point >= 0:
                return

    # -- lines to numbers -------------------------------------------------------------------

    def _tables(self) -> Iterator[tuple[int, Floats, Floats | None, Mask]]:
        """(number of the first line, samples (channels, n), times (n,) or None, usable (n,))."""
        layout = self._layout
        line, skip = 1, layout.first_line - 1
        self._ragged_end = 0
        before: float | None = None
        for piece in self._file.pieces():
            if skip:
                lines = piece.split(b"\n", skip)
                skip -= len(lines) - 1
                line += len(lines) - 1
                piece = lines[-1]
                if skip or not piece:
                    continue
            unfinished = not piece.endswith(b"\n")
            if unfinished:
                piece += b"\n"
            first = line
            table, texts, good, passed = self._numbers(piece, first)
            line += passed
            if unfinished and len(good) and not good[-1]:
                self._ragged_end = line - 1
                table, texts, good = table[:, :-1], texts[:-1], good[:-1]
            if not len(good):
                continue
            times: Floats | None = None
            out = self._left_out(len(table))
            if layout.time_kind in (TimeKind.STAMP, TimeKind.CLOCK):
                times, before = self._text_times(texts, before)
                good &= np.isfinite(times)
            elif layout.time_at is not None:
                times = table[layout.time_at]
                if layout.time_unit != 1.0:
                    times = times * layout.time_unit
                out = [*out, layout.time_at]
            table = table[1:] if out == [0] else np.delete(table, out, axis=0) if out else table
            yield first, table, times, good

    def _text_times(self, texts: list[str], before: float | None) -> tuple[Floats, float | None]:
        if self._layout.time_kind is TimeKind.STAMP:
            times, self._origin = stamps(texts, self._origin)
            return times, None
        times = clocks(texts, before)
        known = times[np.isfinite(times)]
        return times, float(known[-1]) if len(known) else before

    def _numbers(self, piece: bytes, first: int) -> tuple[Floats, list[str], Mask, int]:
        """Table (columns, n), time texts, lines that are usable, lines passed in all."""
        layout = self._layout
        columns = layout.columns
        texts: list[str] = []
        if layout.separator == " ":
            piece = b"\n".join(b" ".join(one.split()) for one in piece.split(b"\n"))
        elif layout.trailing:
            piece = piece.replace(layout.separator.encode() + b"\n", b"\n")
        if layout.time_kind in (TimeKind.STAMP, TimeKind.CLOCK):
            assert layout.time_at is not None
            piece, texts = _without_text(piece, layout.separator, layout.time_at)
            columns -= 1 + layout.time_at
        blank = layout.separator.encode() + b" "
        if layout.separator != " " and b" " in piece and blank in piece:
            piece = piece.replace(blank, blank[:1])
        found = parse(piece, ord(layout.separator), ord(layout.decimal), columns)
        good = ~found.odd
        if found.odd.any():
            at = np.flatnonzero(found.odd)
            lines = [piece[found.starts[k] : found.ends[k]] for k in at.tolist()]
            keep = np.ones(len(good), np.bool_)
            rows, wrong, nothing = read_slowly(lines, columns, layout)
            rows[np.array(self._left_out(columns), np.intp)] = 0.0
            usable = np.asarray(np.isfinite(rows).all(axis=0))
            found.table[:, at] = rows
            good[at] = usable
            keep[at[nothing]] = False
            if np.count_nonzero(wrong) > max(MANY_RAGGED, len(good) // 2):
                raise self._no_table_any_more(lines, wrong, first + int(at[wrong][0]), columns)
            if not keep.all():
                texts = [text for text, kept in zip(texts, keep, strict=False) if kept]
                return found.table[:, keep], texts, good[keep], len(keep)
        return found.table, texts, good, len(good)

    def _left_out(self, columns: int) -> list[int]:
        """Columns without numbers, counted without the time's texts."""
        return [column - (self._layout.columns - columns) for column in self._layout.left_out]

    def _steps_otherwise(self, line: int, step: float) -> RecordingDamaged:
        usual = self._timing.step if self._timing is not None else math.nan
        return damaged(
            f"{self._name}: beyond line {line} times step by {step:g}, not by {usual:g} as before",
            "cut the file there and measure the parts one by one",
        )

    def _no_table_any_more(
        self, lines: list[bytes], wrong: Mask, number_: int, columns: int
    ) -> RecordingDamaged:
        line = lines[int(np.flatnonzero(wrong)[0])].decode("latin-1")
        return damaged(
            f"{self._name}: from line {number_} on it is no table of {columns} columns any more:"
            f" {clean(line)}",
            "what is before it was read; cut the file there",
        )


def _between_gaps(
    placer: Placer, table: Floats, at: npt.NDArray[np.int64], lost: npt.NDArray[np.int64]
) -> Iterator[Block]:
    """Blocks of the sets `at` of a table, with `lost` sets (-1: unknown) missing before each."""
    cuts = np.flatnonzero(lost)
    whole = len(at) == table.shape[1]
    for a, b in zip([0, *cuts.tolist()], [*cuts.tolist(), len(at)], strict=True):
        if b > a:
            if lost[a]:
                placer.miss(int(lost[a]) if lost[a] > 0 else None)
            yield placer.place(table[:, a:b] if whole else table[:, at[a:b]])


def _without_text(piece: bytes, separator: str, time_at: int) -> tuple[bytes, list[str]]:
    """Lines without the fields up to the time's, and the time's texts."""
    texts: list[str] = []
    rests: list[bytes] = []
    mark = separator.encode()
    for line in piece[:-1].split(b"\n"):
        rest = line
        for _ in range(time_at + 1):
            field, _, rest = rest.partition(mark)
        texts.append(field.strip(b' "').decode("latin-1"))
        rests.append(rest)
    return b"\n".join(rests) + b"\n", texts
