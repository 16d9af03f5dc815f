"""Serial devices found: identity, whether they can be opened, and what to do if not."""

from dataclasses import dataclass

from acquisition.links.serial_port import SerialDevice, by_id, devices, probe
from acquisition.stream import clean


@dataclass(frozen=True, slots=True)
class PortFound:
    """One serial device; texts from it are cleaned."""

    device: str
    description: str
    identity: str  # "2341:0043 serial 7573…", or ""
    path: str  # a name that does not change, or ""
    readable: bool
    problem: str = ""
    advice: tuple[str, ...] = ()
    likely: bool = False  # a USB device: more likely the logger than a built-in port


def find_ports() -> list[PortFound]:
    """What is plugged in, likely loggers first."""
    found = [_described(device) for device in devices()]
    return sorted(found, key=lambda port: (not port.likely, port.device))


def _described(device: SerialDevice) -> PortFound:
    refusal = probe(device.device)
    words = " ".join(w for w in (device.manufacturer, device.product) if w) or device.description
    if words in ("", "n/a"):
        words = "serial port"
    return PortFound(
        device=clean(device.device, 80),
        description=clean(words, 60),
        identity=clean(_identity(device), 60),
        path=clean(by_id(device.device), 120),
        readable=refusal is None,
        problem=str(refusal) if refusal is not None else "",
        advice=tuple(getattr(refusal, "__notes__", ())),
        likely=device.vid is not None,
    )


def _identity(device: SerialDevice) -> str:
    if device.vid is None or device.pid is None:
        return ""
    numbered = f" serial {device.serial_number}" if device.serial_number else ", no serial number"
    return f"{device.vid:04x}:{device.pid:04x}{numbered}"
