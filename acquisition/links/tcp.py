"""TcpLink: a logger behind a network socket, with its own reader (select, then 64 kB at a time)."""

import select
import socket

from acquisition.errors import LinkAbsent, LinkClosed, LinkForbidden, LinkLost, LinkUnusable

READ_WAIT = 0.1  # s, what a Link may wait for its first byte
READ_MOST = 1 << 16  # bytes
CONNECT_S = 5.0
# A far end that vanished without a word is noticed after about 20 s, where the system allows it.
KEEPALIVE = (("TCP_KEEPIDLE", 10), ("TCP_KEEPINTVL", 3), ("TCP_KEEPCNT", 3))


class TcpLink:
    """An open connection; see `acquisition.link.Link`. It never sends."""

    def __init__(self, host: str, port: int, connect_s: float = CONNECT_S) -> None:
        """Connect.

        Raises:
            LinkAbsent: no such host, nobody listens, no answer.
            LinkForbidden, LinkUnusable: the system refuses.
        """
        self.name = f"tcp://{f'[{host}]' if ':' in host else host}:{port}"
        self._closing = False
        self._reading = False
        self._socket = self._connect(host, port, connect_s)

    def read(self) -> bytes:
        """What has arrived.

        Raises:
            LinkLost: the far end closed or broke the connection.
            LinkClosed: we closed it.
        """
        self._reading = True
        try:
            if self._closing:
                raise LinkClosed(f"{self.name} was closed")
            ready, _, _ = select.select([self._socket], [], [], READ_WAIT)
            if not ready:
                return b""
            data = self._socket.recv(READ_MOST)
        except BlockingIOError:
            return b""
        except (OSError, ValueError) as error:
            if self._closing:
                raise LinkClosed(f"{self.name} was closed") from error
            raise self._lost(f"{self.name} broke: {_reason(error)}") from error
        finally:
            self._reading = False
            if self._closing:
                self._socket.close()
        if not data:
            raise self._lost(f"{self.name} closed the connection")
        return data

    def close(self) -> None:
        """Let go of it. Another thread's read ends within 0.1 s and then closes."""
        self._closing = True
        if not self._reading:
            self._socket.close()

    def _lost(self, sentence: str) -> LinkLost:
        error = LinkLost(sentence)
        error.add_note("see whether the logger still runs; the watch goes on when it is back")
        return error

    def _connect(self, host: str, port: int, connect_s: float) -> socket.socket:
        if not 0 < port < 65536:  # the system would take it modulo 65536
            raise LinkUnusable(f"{port} is no TCP port; choose one from 1 to 65535")
        try:
            made = socket.create_connection((host, port), timeout=connect_s)
        except (socket.gaierror, UnicodeError) as error:
            absent = LinkAbsent(f"there is no host {host}")
            absent.add_note("see whether the name is spelt right, or give its address")
            raise absent from error
        except ConnectionRefusedError as error:
            absent = LinkAbsent(f"nobody listens at {self.name}")
            absent.add_note("start the logger's server first, or name another port")
            raise absent from error
        except PermissionError as error:
            raise LinkForbidden(f"the system does not allow connecting to {self.name}") from error
        except (TimeoutError, ConnectionError) as error:
            raise self._no_answer(error) from error
        except (OverflowError, ValueError) as error:
            raise LinkUnusable(f"{self.name} is no address to connect to") from error
        except OSError as error:
            raise self._no_answer(error) from error
        made.setblocking(False)
        made.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
        for option, value in KEEPALIVE:
            if hasattr(socket, option):
                made.setsockopt(socket.IPPROTO_TCP, getattr(socket, option), value)
        return made

    def _no_answer(self, error: OSError) -> LinkAbsent:
        absent = LinkAbsent(f"{self.name} does not answer: {_reason(error)}")
        absent.add_note("see whether the logger is on and on the same network")
        return absent


def _reason(error: Exception) -> str:
    return str(getattr(error, "strerror", None) or error).lower()
