"""The engine: Blocks in, measured windows, verdicts and events out. Pure: no clock, no thread.

One engine serves the live watch and a recording alike, so both give the same numbers. It works
on runs of windows in columns (`Batch`); a live watch simply sees runs of length one.
"""

from collections.abc import Sequence

import numpy as np

from acquisition.block import Block
from acquisition.stream import StreamInfo
from dsp.halfcycle import half_cycle_squares
from dsp.measure import measure
from dsp.meters import MeterCard, show
from dsp.power import PowerColumns, measure_pairs
from dsp.reading import Readings, comparable
from dsp.verdict import Judge
from dsp.waveform import Kind, Waveform
from dsp.window import Flag, Windows
from dsp.windowing import Windower
from rig import channels as rig_channels
from rig.scaling import Scaler
from rig.setup import Setup
from shift.batch import Batch, Shown
from shift.event import Event
from shift.happenings import Happenings
from shift.voltage import Watcher


class Engine:
    """Turns a source's Blocks into Batches, and keeps what has to be remembered in between."""

    def __init__(self, setup: Setup, info: StreamInfo, cards: Sequence[MeterCard]) -> None:
        """Join a setup to a stream.

        Raises:
            SetupError: the setup names a channel that the stream does not have.
        """
        self.channels = rig_channels.describe(setup, info)
        self.pair_indices = rig_channels.pairs(setup, self.channels)
        self.nominal = setup.nominal_hz if setup.nominal_hz is not None else info.nominal_hz
        self.limit = setup.limit
        self.cards = tuple(cards)
        self._scaler = Scaler(setup, info)
        self._windower = Windower(
            len(self.channels), rig_channels.reference(setup, self.channels), self.nominal
        )
        self._judges = tuple(Judge(self.limit) for _ in self.cards)
        self._happenings = Happenings(self.channels)
        # Only the supply: a dimmed way leaves any band at every cue.
        supply = rig_channels.reference(setup, self.channels)
        self._voltages = (
            {supply: Watcher(setup.declared_v)}
            if self.channels[supply].kind is Kind.VOLTAGE
            else {}
        )
        self._energy = np.zeros(len(self.pair_indices))
        self._anchor = (0, 0.0)  # a set index and its time, moved when the rate is corrected
        self._rate = 0.0
        self.lost_seconds = 0.0

    @property
    def seconds(self) -> float:
        """Time of the last set fed, on the sample clock."""
        return self._time_of(self._last) if self._rate else 0.0

    _last: int = 0

    def feed(self, block: Block, rate: float) -> list[Batch]:
        """Measure what the block completes.

        Args:
            block: any number of sets.
            rate: sets a second, the best estimate now; may change a little between calls.
        """
        if rate != self._rate:
            if self._rate:
                self._anchor = (self._last, self._time_of(self._last))
            self._rate = rate
        batches: list[Batch] = []
        for waveform in self._scaler.waveforms(block, rate):
            batches += self._measure_all(waveform)
        return batches

    def stream_stops(self, words: str) -> Batch:
        """The source is gone or silent: an event, once."""
        return self._only_events(self._happenings.stream_stops(self.seconds, words))

    def stream_returns(self, seconds: float) -> Batch:
        """It is back after `seconds`: the event ends."""
        return self._only_events(self._happenings.stream_returns(seconds))

    def finish(self) -> list[Batch]:
        """Measure what is left at the end of the stream and close open events."""
        batches = [self._batch(windows) for windows in self._windower.flush()]
        events: tuple[Event, ...] = ()
        for k, watcher in self._voltages.items():
            events += self._happenings.voltage(self.channels[k], watcher.finish(self.seconds))
        events += self._happenings.finish(self.seconds)
        if events:
            batches.append(self._only_events(events))
        return batches

    def _measure_all(self, waveform: Waveform) -> list[Batch]:
        before = self._happenings_before(waveform)
        self._last = waveform.stop
        batches = [self._batch(windows) for windows in self._windower.feed(waveform)]
        later = self._happenings.quiet(self.seconds)
        events = before + later
        if events:
            batches.append(self._only_events(events))
        return batches

    def _happenings_before(self, waveform: Waveform) -> tuple[Event, ...]:
        if not waveform.gap_before:
            return ()
        for watcher in self._voltages.values():
            watcher.gap()
        lost = waveform.lost_before
        begun = waveform.start - (lost or 0)
        if lost:
            self.lost_seconds += lost / self._rate
        return self._happenings.gap(
            self._time_of(begun), lost, None if lost is None else lost / self._rate
        )

    def _batch(self, windows: Windows) -> Batch:
        readings = measure(windows, self.channels, self.nominal, self._anchor)
        usable = comparable(readings)
        shown = []
        for card, judge in zip(self.cards, self._judges, strict=True):
            reading, error, u_error = show(card, windows, readings, self.channels)
            codes = judge.judge(error, u_error, usable)
            shown.append(Shown(card, reading, error, u_error, codes))
        powers = measure_pairs(windows, readings, self.pair_indices, self.channels)
        work = np.nan_to_num(powers.p) * readings.duration[:, None] / 3600.0
        energy = self._energy + np.cumsum(work, axis=0)
        if len(energy):
            self._energy = energy[-1].copy()
        events = self._happenings.windows(readings, shown[0].error, shown[0].codes)
        events += self._voltage_events(windows, readings)
        return Batch(self.channels, windows, readings, tuple(shown), powers, energy, events)

    def _voltage_events(self, windows: Windows, readings: Readings) -> tuple[Event, ...]:
        events: tuple[Event, ...] = ()
        for k, watcher in self._voltages.items():
            if windows.cycles[0]:
                ends, squares = half_cycle_squares(windows, k)
                times = self._anchor[1] + (ends - self._anchor[0]) / self._rate
                told = watcher.half_cycles(times, squares, float(readings.rms[-1, k]))
            else:
                # No cycles to halve: the windows' own RMS says whether the voltage is back. A
                # scrap between two gaps is shorter than a cycle and says nothing.
                whole = (windows.flags & int(Flag.EDGE)) == 0
                ends = readings.start + readings.duration
                told = watcher.values(ends[whole], readings.rms[whole, k])
            events += self._happenings.voltage(self.channels[k], told)
        return events

    def _only_events(self, events: tuple[Event, ...]) -> Batch:
        """A Batch of no windows that carries events."""
        empty = np.empty(0)
        windows = Windows(
            samples=np.empty((len(self.channels), 0)),
            first=self._last,
            rate=self._rate,
            begins=empty.copy(),
            ends=empty.copy(),
            cycles=np.empty(0, np.int64),
            frequency=empty.copy(),
            u_frequency=empty.copy(),
            locks=(),
            flags=np.empty(0, np.int64),
        )
        cells = np.empty((0, len(self.channels)))
        readings = Readings(
            start=empty,
            duration=empty,
            cycles=np.empty(0, np.int64),
            frequency=empty,
            locks=(),
            rms=cells,
            mean=cells,
            arv=cells,
            peak_max=cells,
            peak_min=cells,
            crest_factor=cells,
            form_factor=cells,
            fundamental=cells,
            thd_f=cells,
            harmonics=np.empty((0, len(self.channels), 0), np.complex128),
            averaging=cells,
            averaging_error=cells,
            firing_angle=cells,
            u={},
            flags=np.empty((0, len(self.channels)), np.int64),
        )
        none = np.empty((0, len(self.pair_indices)))
        powers = PowerColumns(self.pair_indices, none, none, none, none, none, none, none)
        return Batch(self.channels, windows, readings, (), powers, none, events)

    def _time_of(self, index: float) -> float:
        return self._anchor[1] + (index - self._anchor[0]) / self._rate
