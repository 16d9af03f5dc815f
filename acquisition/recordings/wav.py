"""WAV recordings: integer PCM of 8 to 32 bits and float, in RIFF or RF64.

The chunks are walked here: a recorder that was killed leaves a header that promises too much or
nothing at all, and what the file really holds is what counts. FLAC is in `flac.py`.
"""

import struct
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

import numpy as np
import numpy.typing as npt

from acquisition.block import Block, Codes
from acquisition.recordings.placing import SETS_AT_A_TIME, Placer
from acquisition.recordings.readable import damaged, refused, shown, size_of, unreadable
from acquisition.recordings.recording import RecordingOptions
from acquisition.stream import ChannelHint, StreamInfo, clean

PCM, FLOAT, EXTENSIBLE = 1, 3, 0xFFFE  # wFormatTag (RFC 2361; from memory, not read)
_OTHER_TAGS = {2: "ADPCM", 6: "A-law", 7: "µ-law", 17: "IMA ADPCM", 80: "MPEG", 85: "MP3"}
_UNKNOWN_SIZE = 0xFFFFFFFF  # written by recorders that stream, and by RF64 where ds64 tells
MOST_CHANNELS = 256


@dataclass(frozen=True, slots=True)
class _Header:
    tag: int
    channels: int
    rate: int
    container: int  # bytes of one sample
    offset: int  # of the first sample
    declared: int | None  # bytes of samples; None: the header does not tell


class WavRecording:
    """A WAV file as Blocks of integer codes (or floats as written)."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Open and read the header.

        Raises:
            RecordingAbsent, RecordingRefused: not to be read, or not such a file.
        """
        self.path = path
        self.bytes_total = size_of(path)
        with path.open("rb") as file:
            head = _read_header(file, self.bytes_total, shown(path))
        self._head = head
        self._frame = head.container * head.channels
        there = self.bytes_total - head.offset
        held = there if head.declared is None else min(there, head.declared)
        self.sets: int | None = held // self._frame
        notes: list[str] = []
        self._damage = ""
        name = shown(path)
        if head.declared is None:
            notes.append(f"{name} does not say how long it is: read to its end.")
        elif head.declared > there:
            self._damage = (
                f"{name} is cut short: its header promises {head.declared // self._frame} sets,"
                f" it holds {self.sets}"
            )
            notes.append(self._damage + ".")
        if self.sets == 0:
            raise refused(f"{name} holds no samples", "check that the recording had finished")
        bits = 8 * head.container
        floating = head.tag == FLOAT
        names = [f"ch{k + 1}" for k in range(head.channels)]
        scale = full_scale(options, names, name)
        self.info = StreamInfo(
            format="wav",
            channels=tuple(
                float_hint(one, scale.get(one))
                if floating
                else pcm_hint(one, bits, scale.get(one), unsigned=bits == 8)  # as WAV has it
                for one in names
            ),
            rate=chosen_rate(options, float(head.rate), notes),
            sample_type=f"f{bits}" if floating else f"u{bits}" if bits == 8 else f"i{bits}",
            byte_order="little",
            bits=None if floating else bits,
            notes=tuple(notes),
        )
        self._done = head.offset

    def blocks(self) -> Iterator[Block]:
        """Blocks in order. Raises RecordingDamaged at the end of a file that was cut."""
        placer = Placer()
        left = self.sets or 0
        self._done = self._head.offset
        try:
            with self.path.open("rb") as file:
                file.seek(self._head.offset)
                while left:
                    data = file.read(min(left, SETS_AT_A_TIME) * self._frame)
                    got = len(data) // self._frame
                    if not got:
                        raise damaged(f"{shown(self.path)} became shorter while it was read")
                    codes = _codes(data[: got * self._frame], self._head)
                    self._done += len(data)
                    left -= got
                    if codes.dtype.kind == "f":
                        yield from placer.place_good(
                            codes, np.asarray(np.isfinite(codes).all(axis=0))
                        )
                    else:
                        yield placer.place(codes)
        except OSError as error:
            raise unreadable(self.path, error) from None
        if self._damage:
            raise damaged(self._damage, "what is there was read; record again if the rest matters")

    def bytes_read(self) -> int:
        """How far reading has come."""
        return self._done

    def close(self) -> None:
        """Nothing stays open between two blocks."""


def pcm_hint(name: str, bits: int, full: float | None, *, unsigned: bool = False) -> ChannelHint:
    """A channel of integer codes; `full` is what full scale (code 32768 of 16 bits) means."""
    half = 1 << (bits - 1)
    return ChannelHint(
        name=name,
        gain=None if full is None else full / half,
        offset_codes=-float(half) if unsigned else 0.0,
        rails=(0, 2 * half - 1) if unsigned else (-half, half - 1),
        step=1.0,
    )


def float_hint(name: str, full: float | None) -> ChannelHint:
    """A channel of floats, where full scale is 1.0."""
    return ChannelHint(name=name, gain=full)


def full_scale(options: RecordingOptions, names: list[str], where: str) -> dict[str, float]:
    """What full scale means, by channel.

    Raises:
        RecordingRefused: --scale names a channel that is not there.
    """
    for channel in options.scale:
        if channel not in names:
            raise refused(
                f"--scale names {clean(channel)}, which is no channel of {where}",
                f"it has {', '.join(names[:8])}" + (" …" if len(names) > 8 else ""),
            )
    return dict(options.scale)


def chosen_rate(options: RecordingOptions, own: float, notes: list[str]) -> float:
    """The person's rate before the file's; a difference is noted."""
    if options.rate is None:
        return own
    if options.rate != own:
        notes.append(f"--rate {options.rate:.10g} is used; the file itself says {own:.10g} Hz.")
    return options.rate


def _read_header(file: BinaryIO, size: int, name: str) -> _Header:
    magic = file.read(12)
    if magic[:4] == b"RIFX":
        raise refused(f"{name} is a big-endian WAV (RIFX), which is not read", _CONVERT)
    if magic[:4] not in (b"RIFF", b"RF64") or magic[8:] != b"WAVE":
        raise refused(f"{name} does not begin as a WAV file does (RIFF … WAVE)", _CONVERT)
    at, long_size, fmt = 12, None, None
    while at + 8 <= size:
        file.seek(at)
        kind, length = struct.unpack("<4sI", file.read(8))
        body = at + 8
        if kind == b"data":
            if fmt is None:
                raise refused(f"{name}: the samples come before the format (byte {at})", _CONVERT)
            declared: int | None = length
            if length == _UNKNOWN_SIZE:
                declared = long_size
            elif length == 0 and size > body:
                declared = None  # never filled in: the recorder was killed
            return _Header(*fmt, body, declared)
        if kind == b"ds64" and length >= 16:
            long_size = struct.unpack("<QQ", file.read(16))[1]
        if kind == b"fmt ":
            fmt = _format(file.read(min(length, 40)), name, body)
        at = body + length + (length & 1)
    raise refused(
        f"{name} ends inside its header: no samples were reached in {size} bytes",
        "check that the recording had finished and was copied whole",
    )


_CONVERT = "save it as plain PCM WAV, for example with an audio editor"


def _format(data: bytes, name: str, at: int) -> tuple[int, int, int, int]:
    if len(data) < 16:
        raise refused(f"{name}: the format chunk at byte {at} is too short", _CONVERT)
    tag, channels, rate, _, align, bits = struct.unpack("<HHIIHH", data[:16])
    if tag == EXTENSIBLE and len(data) >= 26:
        tag = struct.unpack("<H", data[24:26])[0]  # first bytes of the sub-format's GUID
    if tag not in (PCM, FLOAT):
        what = _OTHER_TAGS.get(tag, f"format {tag}")
        raise refused(f"{name} holds {what}, not plain samples", _CONVERT)
    container = (bits + 7) // 8
    if container not in ((1, 2, 3, 4) if tag == PCM else (4, 8)):
        raise refused(f"{name}: {bits} bits a sample (byte {at + 14}) are not read", _CONVERT)
    if not 1 <= channels <= MOST_CHANNELS:
        raise refused(f"{name}: its header claims {channels} channels (byte {at + 2})", _CONVERT)
    if rate == 0:
        raise refused(f"{name}: its header claims a sample rate of 0 (byte {at + 4})", _CONVERT)
    if align != container * channels:
        raise refused(
            f"{name}: its header contradicts itself (byte {at + 12}: {align} bytes a set,"
            f" {channels} channels of {bits} bits)",
            _CONVERT,
        )
    return tag, channels, rate, container


def _codes(data: bytes, head: _Header) -> Codes:
    """Interleaved samples to (channels, sets)."""
    if head.container == 3:
        return _three_bytes(data, head.channels)
    kind = "f" if head.tag == FLOAT else "u" if head.container == 1 else "i"
    flat = np.frombuffer(data, f"<{kind}{head.container}")
    return np.ascontiguousarray(flat.reshape(-1, head.channels).T)


def _three_bytes(data: bytes, channels: int) -> npt.NDArray[np.int32]:
    octets = np.frombuffer(data, np.uint8).reshape(-1, 3)
    wide = np.zeros((len(octets), 4), np.uint8)
    wide[:, 1:] = octets
    flat = wide.view("<i4")[:, 0] >> 8  # shifted down again, so the sign comes along
    return np.ascontiguousarray(flat.reshape(-1, channels).T)
