"""Event: something with a start, an end and one plain sentence."""

from dataclasses import dataclass
from enum import StrEnum


class Phase(StrEnum):
    """An event is told twice: when it begins and when it ends."""

    BEGINS = "begins"
    ENDS = "ends"


@dataclass(frozen=True, slots=True)
class Event:
    """One thing that happened. `words` is the sentence, the same on screen, in logs and report."""

    number: int  # 1, 2, 3 … in order of beginning; both phases of one event share it
    kind: str  # "misleads", "clipped", "gap", "stream", "dip", "swell", "interruption", …
    phase: Phase
    channel: str | None
    start: float  # s on the sample clock
    duration: float | None  # s; None while it lasts
    value: float | None
    unit: str
    words: str
