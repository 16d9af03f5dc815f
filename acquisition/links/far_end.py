"""Far ends: what a simulated logger serves on, a pseudo-terminal or a TCP port of this machine.

One thread, absolute deadlines, writes that never block into a FIFO as small as a board's: when it
is full, or while nobody listens, pieces are dropped as a board would drop them.
"""

import contextlib
import os
import select
import socket
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Protocol

from acquisition.errors import LinkBusy, LinkForbidden, LinkUnusable

FIFO_BYTES = 1 << 15  # of a board with memory for about a second of two channels


class FarEnd(Protocol):
    """Where the simulated logger's bytes go."""

    @property
    def address(self) -> str:
        """What to connect to, as SOURCE names it."""
        ...

    @property
    def heard(self) -> bool:
        """Whether anybody listens now."""
        ...

    def write(self, data: bytes) -> int:
        """Take what fits now, without waiting; returns how much that was."""
        ...

    def wait(self, timeout: float, writing: bool) -> None:
        """Wait until it may take more (when `writing`), somebody comes, or `timeout` s passed."""
        ...

    def close(self) -> None:
        """End it. Safe to call twice."""
        ...


class PtyEnd:
    """A pseudo-terminal: looks like a serial port to whoever opens `address`. POSIX only."""

    def __init__(self, link: Path | None = None) -> None:
        """Make it.

        Args:
            link: a symbolic link to keep pointing at it, as its own name changes at each replug.
        Raises:
            LinkUnusable: this system has none.
        """
        self._link = link
        self._master: int | None = None
        self._slave_name = ""
        self.replug()

    @property
    def address(self) -> str:
        """Path to open."""
        return str(self._link) if self._link is not None else self._slave_name

    @property
    def heard(self) -> bool:
        """Whether somebody has it open: without, the kernel says that it hung up."""
        if self._master is None:
            return False
        poll = select.poll()
        poll.register(self._master, 0)
        return not any(event & select.POLLHUP for _, event in poll.poll(0))

    def write(self, data: bytes) -> int:
        """Take what fits now."""
        if self._master is None:
            return 0
        try:
            return os.write(self._master, data)
        except BlockingIOError:
            return 0
        except OSError:
            return 0  # closed between the look and the write

    def wait(self, timeout: float, writing: bool) -> None:
        """Wait to write more, or pass the time."""
        if writing and self._master is not None:
            select.select([], [self._master], [], timeout)
        else:
            time.sleep(timeout)

    def unplug(self) -> None:
        """Vanish, as a pulled cable does."""
        if self._master is not None:
            os.close(self._master)
            self._master = None

    def replug(self) -> None:
        """Come back, under another name unless there is a `link`."""
        try:
            import pty
            import tty
        except ImportError:
            error = LinkUnusable("this system has no pseudo-terminals")
            error.add_note("serve on tcp:PORT instead")
            raise error from None
        self.unplug()
        try:
            master, slave = pty.openpty()
        except OSError as cause:
            raise LinkUnusable("no pseudo-terminal is free") from cause
        tty.setraw(slave)
        self._slave_name = os.ttyname(slave)
        os.close(slave)
        os.set_blocking(master, False)
        self._master = master
        if self._link is not None:
            self._point_link()

    def close(self) -> None:
        """End it and take the link away."""
        self.unplug()
        if self._link is not None and self._link.is_symlink():
            self._link.unlink()

    def _point_link(self) -> None:
        assert self._link is not None
        if self._link.exists() and not self._link.is_symlink():
            self.unplug()
            error = LinkUnusable(f"{self._link} is there already and is not a link")
            error.add_note("name a path that is free")
            raise error
        # Made aside and moved over, so that the name is never missing for a moment.
        aside = self._link.with_name(self._link.name + ".new")
        aside.unlink(missing_ok=True)
        aside.symlink_to(self._slave_name)
        aside.replace(self._link)


class TcpEnd:
    """A TCP port on 127.0.0.1; one listener at a time, a newer one takes over."""

    def __init__(self, port: int = 0) -> None:
        """Listen.

        Args:
            port: 0 picks a free one.
        Raises:
            LinkBusy, LinkForbidden, LinkUnusable: the port cannot be had.
        """
        self._port = port
        self._listener: socket.socket | None = None
        self._client: socket.socket | None = None
        self.replug()

    @property
    def address(self) -> str:
        """tcp://127.0.0.1:PORT."""
        return f"tcp://127.0.0.1:{self._port}"

    @property
    def heard(self) -> bool:
        """Whether somebody is connected."""
        self._accept()
        if self._client is not None:
            ready, _, _ = select.select([self._client], [], [], 0)
            if ready:
                self._listen_to_client()
        return self._client is not None

    def write(self, data: bytes) -> int:
        """Take what fits now."""
        if self._client is None:
            return 0
        try:
            return self._client.send(data)
        except BlockingIOError:
            return 0
        except OSError:
            self._drop_client()
            return 0

    def wait(self, timeout: float, writing: bool) -> None:
        """Wait to write more, for somebody to connect, or pass the time."""
        reading = [self._listener] if self._listener is not None else []
        waiting = [self._client] if writing and self._client is not None else []
        if reading or waiting:
            select.select(reading, waiting, [], timeout)
        else:
            time.sleep(timeout)

    def unplug(self) -> None:
        """Vanish: the connection breaks and nobody listens any more."""
        self._drop_client()
        if self._listener is not None:
            self._listener.close()
            self._listener = None

    def replug(self) -> None:
        """Come back on the same port."""
        self.unplug()
        listener = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
        listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            listener.bind(("127.0.0.1", self._port))
        except PermissionError as error:
            listener.close()
            raise LinkForbidden(f"this user may not serve on port {self._port}") from error
        except OverflowError as error:
            listener.close()
            raise LinkUnusable(f"{self._port} is no TCP port; choose 1 to 65535") from error
        except OSError as error:
            listener.close()
            busy = LinkBusy(f"port {self._port} is held by another program")
            busy.add_note("name another port, or tcp:0 for any free one")
            raise busy from error
        listener.listen(1)
        listener.setblocking(False)
        self._listener = listener
        self._port = listener.getsockname()[1]

    def close(self) -> None:
        """End it."""
        self.unplug()

    def _accept(self) -> None:
        if self._listener is None:
            return
        with contextlib.suppress(BlockingIOError, ConnectionError):
            client, _ = self._listener.accept()
            client.setblocking(False)
            client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            self._drop_client()
            self._client = client

    def _listen_to_client(self) -> None:
        """A logger ignores what it is sent, but notices a hang-up."""
        assert self._client is not None
        try:
            if not self._client.recv(4096):
                self._drop_client()
        except BlockingIOError:
            pass
        except OSError:
            self._drop_client()

    def _drop_client(self) -> None:
        if self._client is not None:
            self._client.close()
            self._client = None


@dataclass(frozen=True, slots=True)
class Served:
    """What became of the pieces."""

    pieces: int = 0
    bytes_sent: int = 0
    unheard: int = 0  # pieces nobody was there for
    discarded: int = 0  # pieces that the full FIFO had no room for
    latest_s: float = 0.0  # how long after its time the latest piece was offered


def serve(
    pieces: Iterable[tuple[float, bytes]],
    end: FarEnd,
    *,
    speed: float = 1.0,
    until: Callable[[], bool] = lambda: False,
    fifo_bytes: int = FIFO_BYTES,
    on_discard: Callable[[bytes], None] | None = None,
    now: Callable[[], float] = time.monotonic,
) -> Served:
    """Serve pieces in real time until they end or `until` says so.

    Args:
        pieces: `(due_s, bytes)` in order.
        end: where to.
        speed: 2 is twice as fast.
        until: asked about ten times a second at least.
        fifo_bytes: what the board holds back while the host does not read.
        on_discard: told each piece that found no room, so that a logger can account for it.
    """
    served = Served()
    fifo = bytearray()
    start: float | None = None
    for due_s, piece in pieces:
        if start is None:
            start = now() - due_s / speed
        due = start + due_s / speed
        while (left := due - now()) > 0:
            if until():
                return served
            end.wait(min(left, 0.1), bool(fifo))
            served = _drain(fifo, end, served)
        if until():
            return served
        late = now() - due
        if late > served.latest_s:
            served = replace(served, latest_s=late)
        served = replace(served, pieces=served.pieces + 1)
        if not end.heard:
            fifo.clear()
            served = replace(served, unheard=served.unheard + 1)
        elif len(fifo) + len(piece) > fifo_bytes:
            served = replace(served, discarded=served.discarded + 1)
            if on_discard is not None:
                on_discard(piece)
        else:
            fifo += piece
        served = _drain(fifo, end, served)
    # The last of it, for a listener who still reads.
    patience = now() + 1.0
    while fifo and end.heard and now() < patience and not until():
        end.wait(0.05, True)
        served = _drain(fifo, end, served)
    return served


def _drain(fifo: bytearray, end: FarEnd, served: Served) -> Served:
    total = 0
    while fifo:
        written = end.write(bytes(fifo[: 1 << 14]))
        if not written:
            break
        del fifo[:written]
        total += written
    return replace(served, bytes_sent=served.bytes_sent + total) if total else served
