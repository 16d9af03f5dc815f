"""How measured windows leave the program: JSON lines, CSV, plain lines, a table.

Every form shows the same numbers, those of `shift.record`. The stream given is data only;
words for the person go to stderr elsewhere.
"""

import csv
import io
import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol, TextIO

from acquisition.status import ReaderStatus
from acquisition.stream import StreamInfo
from dsp.waveform import Channel
from shift import record, wording
from shift.batch import Batch
from shift.event import Event
from shift.summary import Spread, Summary

# Columns of `--csv`: the window record's single figures, in its order.
CSV_COLUMNS = (
    "channel", "unit", "start_s", "duration_s", "cycles", "frequency_hz", "lock",
    "rms", "rms_u", "mean", "arv", "peak_max", "peak_min", "peak", "crest_factor", "form_factor",
    "fundamental", "thd_f_pct", "averaging_reading", "averaging_error_pct",
    "averaging_error_u_pct", "verdict", "firing_angle_deg", "flags",
)  # fmt: skip

TABLE_EVENTS = 20  # events listed under the table; the records hold them all


@dataclass(frozen=True, slots=True)
class Described:
    """What is being read."""

    source: str
    info: StreamInfo
    rate: float  # sets a second
    channels: tuple[Channel, ...]
    nominal: float | None  # Hz


class Output(Protocol):
    """One form of output."""

    def begin(self, source: Described) -> None:
        """The stream is known."""
        ...

    def batch(self, batch: Batch) -> None:
        """Windows were measured or something happened."""
        ...

    def stream(self, status: ReaderStatus, seconds: float) -> None:
        """How the account of the stream stands; every 10 s."""
        ...

    def end(self, summaries: Sequence[Summary], status: ReaderStatus, seconds: float) -> None:
        """Nothing more comes."""
        ...


def as_data(out: TextIO) -> TextIO:
    """A stream for other programs: UTF-8 and the line ends that are written, on any system."""
    if isinstance(out, io.TextIOWrapper):
        out.reconfigure(encoding="utf-8", newline="")
    return out


class JsonLinesOutput:
    """One record a line."""

    def __init__(self, out: TextIO) -> None:
        self._out = as_data(out)

    def begin(self, source: Described) -> None:
        """The source record."""
        self._write(
            record.source_record(
                source.source, source.info, source.rate, source.channels, source.nominal
            )
        )

    def batch(self, batch: Batch) -> None:
        """Window, pair and event records, in order of time within the run."""
        events = list(batch.events)
        for w in range(len(batch.readings)):
            end = float(batch.readings.start[w] + batch.readings.duration[w])
            for c, channel in enumerate(batch.channels):
                reading = batch.readings.cell(w, c)
                self._write(record.window_record(channel, reading, batch.verdicts(w, c)))
            for power in batch.pairs(w):
                self._write(record.pair_record(power))
            while events and _moment(events[0]) <= end:
                self._write(record.event_record(events.pop(0)))
        for event in events:
            self._write(record.event_record(event))
        self._out.flush()

    def stream(self, status: ReaderStatus, seconds: float) -> None:
        """The stream record."""
        self._write(record.stream_record(status, seconds))
        self._out.flush()

    def end(self, summaries: Sequence[Summary], status: ReaderStatus, seconds: float) -> None:
        """The last stream record and the summaries."""
        self.stream(status, seconds)
        for summary in summaries:
            self._write(record.summary_record(summary))
        self._out.flush()

    def _write(self, one: record.Record) -> None:
        self._out.write(
            json.dumps(one, ensure_ascii=False, allow_nan=False, separators=(",", ":")) + "\n"
        )


class CsvOutput:
    """One row per channel per window, point decimals, a header line."""

    def __init__(self, out: TextIO) -> None:
        self._out = as_data(out)
        self._writer = csv.writer(self._out, lineterminator="\r\n")

    def begin(self, source: Described) -> None:
        """The header."""
        self._writer.writerow(CSV_COLUMNS)

    def batch(self, batch: Batch) -> None:
        """Rows."""
        for w in range(len(batch.readings)):
            for c, channel in enumerate(batch.channels):
                one = record.window_record(channel, batch.readings.cell(w, c), batch.verdicts(w, c))
                one["rms_u"] = record.number(float(batch.readings.u["rms"][w, c]))
                one["flags"] = " ".join(str(flag) for flag in _list(one["flags"]))
                one["channel"] = _cell(channel.name)
                one["unit"] = _cell(channel.unit)
                self._writer.writerow(["" if one[n] is None else one[n] for n in CSV_COLUMNS])
        self._out.flush()

    def stream(self, status: ReaderStatus, seconds: float) -> None:
        """A table of windows has no place for it."""

    def end(self, summaries: Sequence[Summary], status: ReaderStatus, seconds: float) -> None:
        """Nothing to add."""


class PlainOutput:
    """One line per channel per window, for a log or a slow terminal."""

    def __init__(self, out: TextIO) -> None:
        self._out = out

    def begin(self, source: Described) -> None:
        """What is being watched."""
        names = ", ".join(f"{c.name} [{c.unit}]" for c in source.channels)
        self._out.write(
            f"# {source.source}: {source.info.format}, {source.rate:.10g} sets/s, {names}\n"
        )

    def batch(self, batch: Batch) -> None:
        """A line each."""
        for w in range(len(batch.readings)):
            for c, channel in enumerate(batch.channels):
                reading = batch.readings.cell(w, c)
                verdicts = batch.verdicts(w, c)
                rms = wording.quantity(reading.rms, channel.unit, reading.u.get("rms"))
                shown = wording.quantity(
                    reading.averaging, channel.unit, reading.u.get("averaging")
                )
                flags = "".join(f"  [{word}]" for word in reading.flags.words())
                frequency = f"{reading.frequency:7.3f} Hz" if reading.cycles else reading.lock
                self._out.write(
                    f"{reading.start:10.3f} s  {channel.name:<10.10}  true RMS {rms:>11}"
                    f"  averaging meter {shown:>11}  {wording.judgement_words(verdicts[0]):<28}"
                    f"  CF {_figure(reading.crest_factor, 3):>6}"
                    f"  THD-F {_figure(100.0 * reading.thd_f, 2):>6} %  {frequency}{flags}\n"
                )
        for event in batch.events:
            self._out.write(f"{_moment(event):10.3f} s  * {event.words}\n")
        self._out.flush()

    def stream(self, status: ReaderStatus, seconds: float) -> None:
        """One line on the account."""
        tally = status.tally
        lost = "an unknown number" if tally.lost is None else str(tally.lost)
        self._out.write(
            f"{seconds:10.3f} s  stream: {tally.received} sets received, {lost} lost, "
            f"{tally.bad_frames} bad frames, {tally.reconnects} reconnects\n"
        )
        self._out.flush()

    def end(self, summaries: Sequence[Summary], status: ReaderStatus, seconds: float) -> None:
        """The account and one line per channel."""
        self.stream(status, seconds)
        for summary in summaries:
            self._out.write(f"# {_summary_sentence(summary)}\n")
        self._out.flush()


class TableOutput:
    """The whole recording on one page: a table per quantity, what happened, the account."""

    def __init__(self, out: TextIO) -> None:
        self._out = out
        self._events: list[Event] = []
        self._count = 0
        self._first: Described | None = None

    def begin(self, source: Described) -> None:
        """Keep for the heading."""
        self._first = source

    def batch(self, batch: Batch) -> None:
        """Keep the events; the summaries gather the rest."""
        for event in batch.events:
            self._count += 1
            if len(self._events) < TABLE_EVENTS:
                self._events.append(event)

    def stream(self, status: ReaderStatus, seconds: float) -> None:
        """Told once, at the end."""

    def end(self, summaries: Sequence[Summary], status: ReaderStatus, seconds: float) -> None:
        """Print the page."""
        from rich.box import SIMPLE_HEAD
        from rich.console import Console
        from rich.table import Table
        from rich.text import Text

        assert self._first is not None
        first = self._first
        console = Console(
            file=self._out, highlight=False, width=None if self._out.isatty() else 110
        )
        nominal = "" if first.nominal is None else f", nominal {first.nominal:g} Hz"
        console.print(
            Text(
                f"{first.source}: {first.info.format}, {first.rate:.10g} sets/s{nominal}, "
                f"{seconds:.3f} s"
            )
        )
        wide = console.width >= 100
        table = Table(box=SIMPLE_HEAD, header_style="bold", pad_edge=False)
        table.add_column("channel")
        headings = ["true RMS", "crest factor", "THD-F %", "averaging off %", "misled"]
        if wide:
            headings = [*headings[:1], "least … most", *headings[1:], "windows"]
        for heading in headings:
            table.add_column(heading, justify="right", no_wrap=True)
        for s in summaries:
            cells = [
                wording.quantity(s.rms.mean, s.channel.unit),
                _range(s.crest_factor, 1.0, 3),
                _range(s.thd_f, 100.0, 2),
                _range(s.averaging_error, 100.0, 2),
                str(s.windows_misleading),
            ]
            if wide:
                spread = f"{s.rms.low:.6g} … {s.rms.high:.6g}"
                cells = [*cells[:1], spread, *cells[1:], str(s.windows)]
            table.add_row(Text(s.channel.name), *cells)
        console.print(table)
        for summary in summaries:
            console.print(Text(_summary_sentence(summary)), soft_wrap=True)
        if self._events:
            console.print("\nWhat happened:", soft_wrap=True)
        for event in self._events:
            console.print(Text(f"  {_moment(event):10.3f} s  {event.words}"), soft_wrap=True)
        if self._count > len(self._events):
            console.print(f"  and {self._count - len(self._events)} more; --json-lines has all")
        tally = status.tally
        lost = "an unknown number" if tally.lost is None else str(tally.lost)
        console.print(f"\n{tally.received} sets read, {lost} missing.", soft_wrap=True)


def _summary_sentence(summary: Summary) -> str:
    name = summary.channel.name
    if not summary.windows:
        return f"{name}: nothing could be measured."
    if not summary.averaging_error.count:
        return f"{name}: the signal is too small to compare meters."
    low, high = summary.averaging_error.low, summary.averaging_error.high
    worst = low if abs(low) > abs(high) else high
    side = "low" if worst < 0 else "high"
    if not summary.windows_misleading:
        return (
            f"{name}: an averaging meter did not mislead here; "
            f"it was off by at most {wording.percent(abs(worst))}."
        )
    share = summary.windows_misleading / summary.windows
    return (
        f"{name}: an averaging meter misleads in {wording.percent(share)} of the time measured, "
        f"at worst {wording.percent(abs(worst))} {side}."
    )


def _range(spread: Spread, factor: float, places: int) -> str:
    low, high = factor * spread.low, factor * spread.high
    a, b = _figure(low, places), _figure(high, places)
    return a if a == b else f"{a} … {b}"


def _figure(value: float, places: int) -> str:
    return f"{value:.{places}f}" if value == value else "-"


def _moment(event: Event) -> float:
    return event.start + (event.duration or 0.0)


def _cell(text: str) -> str:
    """A name that a spreadsheet must not take for a formula."""
    return "'" + text if text.lstrip()[:1] in ("=", "+", "-", "@") else text


def _list(value: record.Value) -> Sequence[record.Value]:
    assert isinstance(value, list)
    return value
