"""Decoder: what every wire format offers. Bytes in, Blocks out; any slice, never an exception.

Bad data is counted and skipped, never an error. The same bytes give the same sets however they
were sliced; only the cuts between Blocks differ.
"""

from typing import Protocol

from acquisition.accounting import Tally
from acquisition.block import Block
from acquisition.stream import StreamInfo


class Decoder(Protocol):
    """Turns one stream's bytes into Blocks and keeps its account."""

    @property
    def info(self) -> StreamInfo | None:
        """What the stream says of itself; None until known. Blocks may come before it."""
        ...

    @property
    def tally(self) -> Tally:
        """The account so far."""
        ...

    @property
    def problem(self) -> str:
        """A plain sentence while something is wrong with the stream, else ""."""
        ...

    def feed(self, data: bytes, arrived: float) -> list[Block]:
        """Decode what has come. `arrived`: host monotonic time of the last byte [s]."""
        ...

    def reconnected(self) -> None:
        """The link broke and is back: drop the partial unit, keep the account."""
        ...

    def finish(self) -> list[Block]:
        """The stream has ended: settle `info` on what is known, give what was held back."""
        ...
