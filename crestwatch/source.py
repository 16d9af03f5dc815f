"""SOURCE, one grammar everywhere: what the person typed, taken apart but not yet opened."""

import re
from dataclasses import dataclass, field
from pathlib import Path
from urllib.parse import parse_qsl, urlsplit

from crestwatch.diagnostics import UsageError


@dataclass(frozen=True, slots=True)
class SimSource:
    """`sim:SCENE?key=value&…`"""

    scene: str
    options: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class SerialSource:
    """A device path, `COM3`, or `serial:DEVICE?baud=…`."""

    device: str
    options: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class TcpSource:
    """`tcp://HOST:PORT`."""

    host: str
    port: int


@dataclass(frozen=True, slots=True)
class FileSource:
    """A recording's path."""

    path: Path


Source = SimSource | SerialSource | TcpSource | FileSource

GRAMMAR = """\
SOURCE is one of
  sim:SCENE                 a simulated logger (sim:hall, sim:workshop, sim:clean)
  /dev/ttyACM0 or COM3      a serial device; with a rate: serial:/dev/ttyUSB0?baud=115200
  tcp://HOST:PORT           a logger behind a network socket
  FILE                      a recording: CSV, WAV, FLAC, NPZ, NPY, COMTRADE, captured bytes"""


def parse_source(text: str) -> Source:
    """Take a SOURCE apart.

    Raises:
        UsageError: it fits no form of the grammar; the message says which part.
    """
    if not text.strip():
        raise _wrong("SOURCE is empty")
    if text.startswith("sim:"):
        scene, _, query = text[4:].partition("?")
        return SimSource(scene, _options(text, query))
    if text.startswith("serial:"):
        device, _, query = text[7:].partition("?")
        if not device:
            raise _wrong(f"{text} names no device")
        return SerialSource(device, _options(text, query))
    if text.startswith("tcp:"):
        return _tcp(text)
    if re.fullmatch(r"(?i)com\d{1,3}", text):
        return SerialSource(text.upper())
    if re.match(r"[A-Za-z][A-Za-z0-9+.-]+://", text):
        raise _wrong(f"{text.split('://', maxsplit=1)[0]}:// is no kind of source")
    path = Path(text)
    if text.startswith("/dev/") and not path.is_file():
        return SerialSource(text)
    if path.is_char_device():
        return SerialSource(text)
    return FileSource(path)


def _tcp(text: str) -> TcpSource:
    parts = urlsplit(text)
    try:
        port = parts.port
    except ValueError:
        port = None
    if not parts.hostname or port is None or not 0 < port < 65536:
        raise _wrong(f"{text} does not read as tcp://HOST:PORT with a port from 1 to 65535")
    return TcpSource(parts.hostname, port)


def _options(text: str, query: str) -> dict[str, str]:
    try:
        return dict(parse_qsl(query, keep_blank_values=True, strict_parsing=bool(query)))
    except ValueError:
        raise _wrong(f"in {text}, what follows ? is not key=value&key=value") from None


def _wrong(sentence: str) -> UsageError:
    error = UsageError(sentence)
    error.add_note("name a source such as sim:hall, /dev/ttyACM0, tcp://127.0.0.1:5000 or a file")
    return error
