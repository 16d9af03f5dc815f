"""SerialLink: a serial port, with every way it can refuse or vanish told apart.

Reads go past pyserial on POSIX: wait for the descriptor, then drain it until empty, because a
tty's queue holds 4095 bytes and a slower reader loses what is over. `SerialOpener` finds a logger
again that came back under another name.
"""

import contextlib
import errno
import os
import select
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import serial
from serial.tools import list_ports

from acquisition.errors import (
    LinkAbsent,
    LinkBusy,
    LinkClosed,
    LinkError,
    LinkForbidden,
    LinkLost,
    LinkUnusable,
)

READ_WAIT = 0.1  # s, what a Link may wait for its first byte
READ_MOST = 1 << 16  # bytes
POSIX = os.name == "posix"
BUSY = (errno.EAGAIN, errno.EBUSY, errno.EACCES if not POSIX else errno.EBUSY)
ABSENT = (errno.ENOENT, errno.ENODEV, errno.ENXIO)


@dataclass(frozen=True, slots=True)
class SerialDevice:
    """A serial device that the system lists."""

    device: str  # what to open
    description: str
    vid: int | None
    pid: int | None
    serial_number: str
    location: str  # where on the bus it is plugged in
    manufacturer: str
    product: str

    @property
    def identity(self) -> tuple[int | None, int | None, str]:
        """What stays when it is plugged in elsewhere."""
        return (self.vid, self.pid, self.serial_number)


def devices() -> list[SerialDevice]:
    """All serial devices that the system lists now."""
    found = []
    for port in list_ports.comports():
        found.append(
            SerialDevice(
                device=port.device,
                description=port.description or "",
                vid=port.vid,
                pid=port.pid,
                serial_number=port.serial_number or "",
                location=port.location or "",
                manufacturer=port.manufacturer or "",
                product=port.product or "",
            )
        )
    return sorted(found, key=lambda one: one.device)


class SerialLink:
    """An open serial port; see `acquisition.link.Link`."""

    def __init__(self, device: str, baud: int = 115200, dtr: bool = True) -> None:
        """Open it, for us alone.

        Args:
            device: a path, or COM3.
            baud: bits a second; USB boards ignore it.
            dtr: the state of that line. Many boards send only while it is set, and some restart
                when it changes.
        Raises:
            LinkAbsent, LinkBusy, LinkForbidden, LinkUnusable: why not, with advice as notes.
        """
        self.name = device
        self._closing = False
        self._reading = False
        self._port = _open(device, baud, dtr)

    def read(self) -> bytes:
        """What has arrived.

        Raises:
            LinkLost: it was unplugged or broke.
            LinkClosed: we closed it.
        """
        # Set first, looked at second: `close` does it the other way round, so one of us closes.
        self._reading = True
        try:
            if self._closing:
                raise LinkClosed(f"{self.name} was closed")
            data = self._read_posix() if POSIX else self._read_windows()
        except (OSError, TypeError, serial.SerialException) as error:
            # TypeError: pyserial, when its descriptor vanished under a read.
            if self._closing:
                raise LinkClosed(f"{self.name} was closed") from error
            raise self._lost() from error
        finally:
            self._reading = False
            if self._closing:
                _shut(self._port)
        return data

    def close(self) -> None:
        """Let go of it. Another thread's read ends within 0.1 s and then closes."""
        self._closing = True
        if not self._reading:
            _shut(self._port)

    def _read_posix(self) -> bytes:
        descriptor = self._port.fileno()
        ready, _, _ = select.select([descriptor], [], [], READ_WAIT)
        if not ready:
            return b""
        parts: list[bytes] = []
        size = 0
        while size < READ_MOST:
            try:
                part = os.read(descriptor, READ_MOST - size)
            except BlockingIOError:
                break
            except OSError:
                if parts:
                    break  # hand out what came; the next read tells of the loss
                raise
            if not part:
                if not parts:
                    # Said to be readable and empty: the far end hung up.
                    raise self._lost()
                break
            parts.append(part)
            size += len(part)
        return b"".join(parts)

    def _read_windows(self) -> bytes:
        first: bytes = self._port.read(1)
        if not first:
            return b""
        waiting = min(int(self._port.in_waiting), READ_MOST)
        return first + (self._port.read(waiting) if waiting else b"")

    def _lost(self) -> LinkLost:
        error = LinkLost(f"{self.name} was unplugged or reset")
        error.add_note("plug it in again; the watch goes on by itself when it is back")
        return error


class SerialOpener:
    """Opens a port, and later the same device whatever it is then called."""

    def __init__(self, device: str, baud: int = 115200, dtr: bool = True) -> None:
        self._device = device
        self._baud = baud
        self._dtr = dtr
        self._known: SerialDevice | None = None

    def __call__(self) -> SerialLink:
        """Open it.

        Raises:
            LinkError: as SerialLink; LinkAbsent too while two devices could be it.
        """
        device = self._device if self._known is None else find_again(self._known, devices())
        link = SerialLink(device or self._device, self._baud, self._dtr)
        if self._known is None:
            real = os.path.realpath(self._device)  # a by-id path is a link to the device
            self._known = next(
                (d for d in devices() if d.vid is not None and os.path.realpath(d.device) == real),
                None,
            )
        return link


def find_again(known: SerialDevice, present: list[SerialDevice]) -> str | None:
    """Where a device is now; None when it is not there.

    With a serial number that settles it; clones without one are told apart by where they are
    plugged in.

    Raises:
        LinkAbsent: several could be it.
    """
    same = [d for d in present if d.identity == known.identity]
    if not known.serial_number and len(same) > 1:
        same = [d for d in same if d.location == known.location]
    if len(same) > 1:
        names = ", ".join(d.device for d in same)
        error = LinkAbsent(f"the logger may be any of {names}: they carry the same identity")
        error.add_note("name one of them, by its /dev/serial/by-path name if there is one")
        raise error
    return same[0].device if same else None


def probe(device: str) -> LinkError | None:
    """Why a port could not be opened now, without opening it; None when nothing speaks against."""
    if not POSIX:
        return None
    path = Path(device)
    if not path.exists():
        return _absent(device)
    if not os.access(path, os.R_OK | os.W_OK):
        return _forbidden(device)
    return None


def by_id(device: str) -> str:
    """The device's name under /dev/serial/by-id, which does not change; "" without one."""
    folder = Path("/dev/serial/by-id")
    real = os.path.realpath(device)
    for link in _entries(folder):
        if os.path.realpath(link) == real:
            return str(link)
    return ""


def _entries(folder: Path) -> Iterator[Path]:
    try:
        yield from sorted(folder.iterdir())
    except OSError:
        return


def _open(device: str, baud: int, dtr: bool) -> serial.Serial:
    port = serial.Serial()
    try:
        port.port = device
        port.baudrate = baud
        port.timeout = READ_WAIT  # set once: setting it later reconfigures the port
        port.exclusive = True if POSIX else None
        port.dtr = dtr
        port.open()
    except (serial.SerialException, OSError, ValueError, OverflowError) as error:
        _shut(port)
        raise _refusal(device, baud, error) from error
    # Not every driver knows it, and nothing depends on it; bridges hold data for 16 ms otherwise.
    with contextlib.suppress(AttributeError, NotImplementedError, OSError, ValueError):
        port.set_low_latency_mode(True)
    return port


def _shut(port: serial.Serial) -> None:
    # It may be gone already.
    with contextlib.suppress(OSError, TypeError, serial.SerialException):
        port.close()


def _refusal(device: str, baud: int, error: Exception) -> LinkError:
    number = getattr(error, "errno", None)
    told = str(error)
    if number in ABSENT or (number is None and "FileNotFoundError" in told):
        return _absent(device)
    if number in BUSY or (number is None and "PermissionError" in told):
        busy = LinkBusy(f"{device} is held by another program")
        busy.add_note("close the other program, a serial monitor for example, and try again")
        return busy
    if number in (errno.EACCES, errno.EPERM):
        return _forbidden(device)
    if isinstance(error, ValueError | OverflowError) or "baud" in told.lower():
        refused = LinkUnusable(f"{device} does not take {baud} baud")
        refused.add_note("name the rate that the logger's program sets, such as 115200")
        return refused
    unusable = LinkUnusable(f"{device} is not a serial port")
    unusable.add_note("`crestwatch ports` lists the serial ports that are there")
    return unusable


def _absent(device: str) -> LinkAbsent:
    error = LinkAbsent(f"there is no port {device}")
    error.add_note("plug the logger in; `crestwatch ports` lists what is there")
    return error


def _forbidden(device: str) -> LinkForbidden:
    error = LinkForbidden(f"this user may not open {device}")
    group = _group(device)
    if group:
        error.add_note(f"join the group {group}: sudo usermod -aG {group} $USER, then log in again")
    else:
        error.add_note("ask whoever runs this machine for access to it")
    return error


def _group(device: str) -> str:
    """The group that may open it; "" when none may, or joining it would be too much."""
    try:
        import grp

        status = Path(device).stat()
        name = grp.getgrgid(status.st_gid).gr_name
    except (ImportError, OSError, KeyError):
        return ""
    return "" if name in ("root", "wheel") or not status.st_mode & 0o060 else name
