"""Snapshot: all that the screen may show at one moment, swapped in by one assignment."""

from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
import numpy.typing as npt

from acquisition.status import ReaderStatus
from dsp.power import Power
from dsp.reading import Reading
from dsp.verdict import Verdict
from dsp.waveform import Channel
from dsp.window import Window
from shift.event import Event


class Stage(StrEnum):
    """How far the watch has come."""

    STARTING = "starting"  # nothing has come yet
    IDENTIFYING = "identifying"  # bytes come; the format is not yet known
    TIMING = "timing"  # the format carries no rate; it is being measured from arrival
    MEASURING = "measuring"
    WAITING = "waiting"  # the stream is quiet or gone; the last figures stand
    FINISHED = "finished"
    FAILED = "failed"


@dataclass(frozen=True, slots=True, eq=False)
class Trend:
    """True RMS over the last minutes, one point a window, oldest first. NaN is a gap."""

    seconds: npt.NDArray[np.float64]  # (n,) s on the sample clock
    values: npt.NDArray[np.float64]  # (n,) in the channel's unit


@dataclass(frozen=True, slots=True, eq=False)
class ChannelView:
    """One channel as it stands now."""

    channel: Channel
    reading: Reading | None  # None until the first window
    verdicts: tuple[Verdict, ...]  # one a meter card in force; the averaging card first
    trend: Trend
    misleading_windows: int = 0
    windows: int = 0


@dataclass(frozen=True, slots=True, eq=False)
class Snapshot:
    """The engine's latest whole state."""

    source: str  # as the person named it, cleaned
    stage: Stage
    words: str  # one sentence on the stage: what it is doing or waiting for
    stream: ReaderStatus
    channels: tuple[ChannelView, ...] = ()
    window: Window | None = None  # the newest window, its samples for the Wave page
    pairs: tuple[Power, ...] = ()
    events: tuple[Event, ...] = ()  # newest last, bounded
    advice: tuple[str, ...] = ()  # sentences: no setup, counts, scale missing …
    limit: float = 0.02  # verdict limit, fraction
    nominal: float | None = None  # Hz
    seconds: float = 0.0  # measured so far, on the sample clock
    windows: int = 0
    setup_name: str = ""
    number: int = field(default=0)  # grows with every new state
