"""What the reader says of itself: one immutable value, replaced whole."""

from dataclasses import dataclass, field
from enum import StrEnum

from acquisition.accounting import Tally
from acquisition.clock import ClockEstimate
from acquisition.stream import StreamInfo


class LinkState(StrEnum):
    """Where the connection stands."""

    ABSENT = "absent"
    OPENING = "opening"
    LISTENING = "listening"  # open, format not yet known
    LIVE = "live"
    QUIET = "quiet"  # open, but nothing has come for a while
    GONE = "gone"  # was live; being looked for
    FINISHED = "finished"  # a bounded source gave all it had
    FAILED = "failed"  # lost for good; `problem` says why


@dataclass(frozen=True, slots=True)
class ReaderStatus:
    """The reader's latest whole state."""

    state: LinkState = LinkState.OPENING
    link: str = ""
    info: StreamInfo | None = None
    tally: Tally = field(default_factory=Tally)
    clock: ClockEstimate | None = None
    bytes_received: int = 0
    problem: str = ""  # a sentence, when something needs one
    advice: tuple[str, ...] = ()
