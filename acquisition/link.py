"""Link: where bytes come from, whatever it is. Serial, TCP, replay and simulated fit alike."""

from typing import Protocol


class Link(Protocol):
    """One open connection.

    `read` returns what has arrived, waits at most about 0.1 s for the first byte, and returns
    b"" when nothing came. It raises LinkLost when the far end is gone for now, LinkFinished when
    a bounded source has given everything, LinkClosed after `close`.
    """

    @property
    def name(self) -> str:
        """What to call it in a sentence."""
        ...

    def read(self) -> bytes:
        """Bytes that have arrived; b"" after a short wait for nothing."""
        ...

    def close(self) -> None:
        """Let go of it. Safe to call twice, and from another thread."""
        ...
