"""Recording: a file read as a stream of Blocks, in bounded memory."""

from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Protocol

from acquisition.block import Block
from acquisition.stream import StreamInfo


@dataclass(frozen=True, slots=True)
class RecordingOptions:
    """What the person said about a file that the file may not say itself."""

    rate: float | None = None  # --rate, sets a second
    scale: dict[str, float] = field(default_factory=dict)  # --scale CHANNEL=UNITS_AT_FULL_SCALE
    format: str | None = None  # --format
    byte_order: str | None = None
    channels: int | None = None


class Recording(Protocol):
    """An opened recording."""

    path: Path
    info: StreamInfo  # rate is always known here
    sets: int | None  # how many it holds, None when that takes reading it
    bytes_total: int  # for progress

    def blocks(self) -> Iterator[Block]:
        """Blocks in order. May raise RecordingDamaged after good ones; those stand."""
        ...

    def bytes_read(self) -> int:
        """How far reading has come, for progress."""
        ...

    def close(self) -> None:
        """Let go of the file."""
        ...
