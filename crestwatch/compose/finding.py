"""What is plugged in, and what a stream is."""

import time
from pathlib import Path

from acquisition.autodecode import AutoDecoder
from acquisition.errors import LinkLost, RecordingRefused
from acquisition.links.ports import find_ports
from acquisition.reader import Reader
from acquisition.sniff import Identification
from acquisition.status import LinkState
from acquisition.stream import StreamInfo, clean
from crestwatch.compose.sources import opener, recording
from crestwatch.source import FileSource, Source
from rig.proposal import setup_lines
from rig.setup import Setup


def ports() -> list[dict[str, object]]:
    """The serial devices found, likely loggers first, for `ports`."""
    return [
        {
            "device": port.device,
            "description": port.description,
            "identity": port.identity,
            "path": port.path,
            "readable": port.readable,
            "likely": port.likely,
            "problem": port.problem,
            "advice": "; ".join(port.advice),
        }
        for port in find_ports()
    ]


def identify(source: Source, length: float, baud: int | None) -> dict[str, object]:
    """What format a source is in: the object that `identify --json` prints.

    Args:
        length: how long a live source is listened to at most. [s]
    """
    if isinstance(source, FileSource):
        if _is_recording(source.path):
            opened = recording(source.path)
            opened.close()
            return _told(opened.info, None, None)
        with source.path.open("rb") as file:
            data = file.read(1 << 18)
        decoder = AutoDecoder()
        decoder.feed(data, 0.0)
        decoder.finish()
        if not data:
            raise RecordingRefused(f"{clean(str(source.path), 120)} is empty")
        return _told(decoder.info, decoder.identification, None)
    decoder = AutoDecoder()
    reader = Reader(opener(source, Setup.empty(), 1.0, baud), decoder, reconnect=False)
    reader.start()
    try:
        began = time.monotonic()
        while time.monotonic() - began < length:
            reader.take(0.1)
            status = reader.status
            if status.state in (LinkState.FINISHED, LinkState.FAILED):
                break
            info = status.info
            if info is not None and info.rate is not None and time.monotonic() - began > 0.5:
                break
    finally:
        reader.stop()
    status = reader.status
    if status.state is LinkState.FAILED and not status.bytes_received:
        lost = LinkLost(status.problem or f"{status.link} is gone")
        for line in status.advice:
            lost.add_note(line)
        raise lost
    if not status.bytes_received:
        silent = LinkLost(f"nothing came from {status.link} in {length:g} s")
        silent.add_note("check the cable, the baud rate, and that the logger is sending")
        raise silent
    measured = status.clock.rate if status.clock is not None else None
    found = decoder.identification or Identification(None)
    return _told(status.info, found, measured)


def _is_recording(path: Path) -> bool:
    """Whether a file is of a kind other than captured bytes."""
    suffixes = (".csv", ".tsv", ".wav", ".flac", ".npz", ".npy", ".cfg", ".dat", ".cff")
    return path.suffix.lower() in suffixes or not path.is_file()


def _told(
    info: StreamInfo | None, found: Identification | None, measured: float | None
) -> dict[str, object]:
    if info is None:
        return {
            "format": None,
            "channels": None,
            "type": None,
            "byte_order": None,
            "rate_hz": None,
            "confidence": 0.0,
            "ambiguous": list(found.ambiguous) if found else [],
            "reasons": list(found.reasons) if found else [],
            "setup": "",
        }
    rate = info.rate if info.rate is not None else measured
    return {
        "format": info.format,
        "channels": len(info.channels),
        "type": info.sample_type,
        "byte_order": info.byte_order or None,
        "rate_hz": None if rate is None else float(f"{rate:.8g}"),
        "confidence": 1.0 if found is None else round(found.confidence, 3),
        "ambiguous": list(found.ambiguous) if found else [],
        "reasons": list(found.reasons) if found else [f"the file is {info.format}"],
        "setup": setup_lines(info, measured),
    }
