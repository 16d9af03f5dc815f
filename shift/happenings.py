"""What happens in a stream, told as events: meters that mislead, clipping, missing samples.

Looks at whole runs of windows for changes of state, so a quiet hour costs nothing. Gaps that
follow each other closely are one event: a bad cable is one story, not ten thousand.
"""

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from dsp.reading import Readings
from dsp.verdict import JUDGEMENTS, Judgement
from dsp.waveform import Channel
from dsp.window import Flag
from shift import wording
from shift.event import Event, Phase
from shift.voltage import Excursion

# A gap event ends once this long has passed without another; long enough to join the stutter of
# one bad contact, short enough to be told while it matters.
GAP_QUIET = 2.0  # s


@dataclass(frozen=True, slots=True)
class _Open:
    number: int
    kind: str
    channel: str | None
    start: float  # s
    worst: float  # largest error met (fraction), or samples lost
    end: float = 0.0
    places: int = 1
    unknown: bool = False


class Happenings:
    """Remembers which events are open and says when they begin and end."""

    def __init__(self, channels: Sequence[Channel]) -> None:
        self._channels = tuple(channels)
        self._count = 0
        self._misleading: list[_Open | None] = [None] * len(self._channels)
        self._clipped: list[_Open | None] = [None] * len(self._channels)
        self._excursions: dict[str, _Open] = {}
        self._gap: _Open | None = None
        self._stopped: _Open | None = None

    def windows(
        self,
        readings: Readings,
        error: npt.NDArray[np.float64],
        codes: npt.NDArray[np.int8],
    ) -> tuple[Event, ...]:
        """Events in a run of windows.

        Args:
            readings: the run.
            error: (w, c) averaging error, fraction.
            codes: (w, c) judgement on the averaging meter, positions in JUDGEMENTS.
        """
        if not len(readings):
            return ()
        events: list[Event] = []
        misleads = codes == JUDGEMENTS.index(Judgement.MISLEADS)
        clipped = (readings.flags & int(Flag.CLIPPED)) != 0
        for c, channel in enumerate(self._channels):
            events += self._misleads(c, channel, readings, error[:, c], misleads[:, c])
            events += self._clips(c, channel, readings, clipped[:, c])
        return tuple(sorted(events, key=_when))

    def voltage(self, channel: Channel, told: Sequence[Excursion]) -> tuple[Event, ...]:
        """What a voltage's watcher tells, as events."""
        events = []
        for excursion in told:
            if excursion.end is None:
                opened = self._begin(excursion.name, channel.name, excursion.start, 0.0)
                self._excursions[channel.name] = opened
                words = wording.excursion_begins(channel, excursion.name, excursion.worst)
                events.append(
                    self._tell(opened, Phase.BEGINS, None, excursion.worst, channel.unit, words)
                )
                continue
            opened = self._excursions.pop(channel.name)
            seconds = excursion.end - excursion.start
            share = excursion.worst / excursion.reference
            words = wording.excursion_ends(channel, excursion.name, excursion.worst, share, seconds)
            # A dip that fell to nothing ends as the interruption that it became.
            opened = replace(opened, kind=excursion.name)
            events.append(
                self._tell(opened, Phase.ENDS, seconds, excursion.worst, channel.unit, words)
            )
        return tuple(events)

    def gap(self, start: float, lost: int | None, seconds: float | None) -> tuple[Event, ...]:
        """Samples are missing: `lost` sets from `start` on (None: the format cannot tell)."""
        end = start + (seconds or 0.0)
        if self._gap is not None:
            self._gap = replace(
                self._gap,
                worst=self._gap.worst + (lost or 0),
                end=end,
                places=self._gap.places + 1,
                unknown=self._gap.unknown or lost is None,
            )
            return ()
        self._gap = self._begin("gap", None, start, float(lost or 0))
        self._gap = replace(self._gap, end=end, unknown=lost is None)
        words = wording.gap(lost, seconds)
        value = None if lost is None else float(lost)
        return (self._tell(self._gap, Phase.BEGINS, None, value, "samples", words),)

    def quiet(self, now: float) -> tuple[Event, ...]:
        """Close the gap event once it has been quiet for long enough; `now` on the sample clock."""
        if self._gap is None or now - self._gap.end < GAP_QUIET:
            return ()
        return self._close_gap()

    def stream_stops(self, now: float, words: str) -> tuple[Event, ...]:
        """The source is gone or silent; `now` on the sample clock, which stands still meanwhile."""
        if self._stopped is not None:
            return ()
        self._stopped = self._begin("stream", None, now, 0.0)
        return (self._tell(self._stopped, Phase.BEGINS, None, None, "s", words),)

    def stream_returns(self, seconds: float) -> tuple[Event, ...]:
        """It is back after `seconds` of the host's clock."""
        opened, self._stopped = self._stopped, None
        if opened is None:
            return ()
        words = wording.stream_returns(seconds)
        return (self._tell(opened, Phase.ENDS, seconds, seconds, "s", words),)

    def finish(self, now: float) -> tuple[Event, ...]:
        """Close everything at the end of the stream."""
        events = list(self._close_gap()) if self._gap is not None else []
        for c, channel in enumerate(self._channels):
            events += self._end_misleads(c, channel, now)
            events += self._end_clips(c, channel, now)
        return tuple(events)

    def _misleads(
        self,
        c: int,
        channel: Channel,
        readings: Readings,
        error: npt.NDArray[np.float64],
        state: npt.NDArray[np.bool_],
    ) -> list[Event]:
        events: list[Event] = []
        for w, end, inside in _runs(state):
            if not inside:
                events += self._end_misleads(c, channel, float(readings.start[w]))
                continue
            opened = self._misleading[c]
            if opened is None:
                opened = self._begin("misleads", channel.name, float(readings.start[w]), 0.0)
                words = wording.misleads_begins(channel, readings.cell(w, c))
                events.append(
                    self._tell(opened, Phase.BEGINS, None, 100.0 * float(error[w]), "%", words)
                )
            stretch = error[w:end]
            stretch = stretch[np.isfinite(stretch)]
            if len(stretch):
                worst = float(stretch[np.argmax(np.abs(stretch))])
                if abs(worst) > abs(opened.worst):
                    opened = replace(opened, worst=worst)
            self._misleading[c] = opened
        return events

    def _end_misleads(self, c: int, channel: Channel, end: float) -> list[Event]:
        opened, self._misleading[c] = self._misleading[c], None
        if opened is None:
            return []
        seconds = end - opened.start
        words = wording.misleads_ends(channel, opened.worst, seconds)
        return [self._tell(opened, Phase.ENDS, seconds, 100.0 * opened.worst, "%", words)]

    def _clips(
        self, c: int, channel: Channel, readings: Readings, state: npt.NDArray[np.bool_]
    ) -> list[Event]:
        events: list[Event] = []
        for w, _, inside in _runs(state):
            if not inside:
                events += self._end_clips(c, channel, float(readings.start[w]))
            elif self._clipped[c] is None:
                opened = self._begin("clipped", channel.name, float(readings.start[w]), 0.0)
                self._clipped[c] = opened
                words = wording.clipped_begins(channel)
                peak = readings.cell(w, c).peak
                events.append(self._tell(opened, Phase.BEGINS, None, peak, channel.unit, words))
        return events

    def _end_clips(self, c: int, channel: Channel, end: float) -> list[Event]:
        opened, self._clipped[c] = self._clipped[c], None
        if opened is None:
            return []
        seconds = end - opened.start
        words = wording.clipped_ends(channel, seconds)
        return [self._tell(opened, Phase.ENDS, seconds, None, channel.unit, words)]

    def _close_gap(self) -> tuple[Event, ...]:
        opened, self._gap = self._gap, None
        assert opened is not None
        value = None if opened.unknown else opened.worst
        words = wording.gap_ends(value, opened.places, opened.end - opened.start)
        return (self._tell(opened, Phase.ENDS, opened.end - opened.start, value, "samples", words),)

    def _begin(self, kind: str, channel: str | None, start: float, worst: float) -> _Open:
        self._count += 1
        return _Open(self._count, kind, channel, start, worst)

    @staticmethod
    def _tell(
        opened: _Open,
        phase: Phase,
        seconds: float | None,
        value: float | None,
        unit: str,
        words: str,
    ) -> Event:
        return Event(
            number=opened.number,
            kind=opened.kind,
            phase=phase,
            channel=opened.channel,
            start=opened.start,
            duration=seconds,
            value=value,
            unit=unit,
            words=words,
        )


def _runs(state: npt.NDArray[np.bool_]) -> list[tuple[int, int, bool]]:
    """Stretches of equal state: (first window, one past the last, the state)."""
    cuts = [0, *(np.flatnonzero(state[1:] != state[:-1]) + 1).tolist(), len(state)]
    return [(a, b, bool(state[a])) for a, b in itertools.pairwise(cuts) if b > a]


def _when(event: Event) -> float:
    return event.start + (event.duration or 0.0)
