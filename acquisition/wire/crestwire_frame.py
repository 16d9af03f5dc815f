"""crestwire 1, the layout: header, sample types and tagged values. Encoder and decoder share it.

A frame is 00, COBS(body + CRC), 00. All numbers are little-endian; the CRC is CRC-32 with the
reflected polynomial 0x04C11DB7 (what zlib computes) over the body. docs/crestwire.md is the page.
"""

import struct
from dataclasses import dataclass
from enum import IntEnum, IntFlag

import numpy as np
import numpy.typing as npt

from acquisition.stream import clean

VERSION = 1
HEADER = struct.Struct("<BBHIIBBBBH")
CRC = struct.Struct("<I")
BODY_LIMIT = 2048  # bytes, so that a small board can hold one
# COBS adds a byte to every 254 and one more; then the CRC.
UNIT_LIMIT = BODY_LIMIT + CRC.size + (BODY_LIMIT + CRC.size) // 254 + 1
# CRC-32 of anything followed by its own CRC; a property of the polynomial and the final xor.
RESIDUE = 0x2144DF1C
CHANNEL_LIMIT = 32
DEFAULT_TICK_HZ = 1_000_000


class Kind(IntEnum):
    """What a frame carries."""

    HELLO = 0
    DATA = 1
    STATUS = 2
    PULSE = 3
    TEXT = 4


class FrameFlag(IntFlag):
    """Bits of header byte 14."""

    DISCARDED = 0x01
    RAIL = 0x02
    CLOCK_SET = 0x04
    TEST_PATTERN = 0x80


@dataclass(frozen=True, slots=True)
class SampleType:
    """How one sample lies on the wire."""

    code: int
    name: str
    width: int  # bytes
    wire: np.dtype[np.generic]  # of one sample, or of one byte when numpy has no such type
    signed: bool


SAMPLE_TYPES = (
    SampleType(1, "u16", 2, np.dtype("<u2"), False),
    SampleType(2, "i16", 2, np.dtype("<i2"), True),
    SampleType(3, "i24", 3, np.dtype("u1"), True),
    SampleType(4, "i32", 4, np.dtype("<i4"), True),
    SampleType(5, "f32", 4, np.dtype("<f4"), True),
)
BY_CODE = {kind.code: kind for kind in SAMPLE_TYPES}
BY_NAME = {kind.name: kind for kind in SAMPLE_TYPES}


def unpack_samples(payload: bytes, kind: SampleType, channels: int) -> npt.NDArray[np.generic]:
    """Interleaved samples as (channels, sets). The 24-bit kind comes out as int32."""
    if kind.name == "i24":
        bytes_ = np.frombuffer(payload, np.uint8).reshape(-1, 3)
        wide = np.zeros((len(bytes_), 4), np.uint8)
        wide[:, 1:] = bytes_
        # Shifted down as signed, so that the top bit spreads.
        return (wide.view("<i4")[:, 0] >> 8).reshape(-1, channels).T
    return np.frombuffer(payload, kind.wire).reshape(-1, channels).T


def pack_samples(codes: npt.NDArray[np.generic], kind: SampleType) -> bytes:
    """The inverse of `unpack_samples`: (channels, sets) to interleaved bytes."""
    interleaved = np.asarray(codes).T
    if kind.name == "i24":
        wide = np.ascontiguousarray(interleaved, "<i4").view(np.uint8).reshape(-1, 4)
        return wide[:, :3].tobytes()
    return interleaved.astype(kind.wire, casting="unsafe").tobytes()


@dataclass(frozen=True, slots=True)
class ChannelHello:
    """What HELLO says of one channel. value = gain * (code + offset)."""

    name: str = ""
    unit: str = ""
    gain: float | None = None
    offset: float = 0.0  # codes
    skew_ns: int | None = None  # sampled this much after channel 0
    rails: tuple[int, int] | None = None


@dataclass(frozen=True, slots=True)
class Hello:
    """What a logger says of itself at boot and each second."""

    rate_mhz: int | None = None  # millihertz
    tick_hz: int | None = None
    bits: int | None = None
    tolerance_ppm: int | None = None
    unit_id: str = ""
    reset_cause: int | None = None
    firmware: str = ""
    clock: int | None = None  # 0 unknown, 1 RC, 2 ceramic, 3 crystal
    boot_count: int | None = None
    channels: tuple[ChannelHello, ...] = ()


class Tag(IntEnum):
    """Names of the tagged values."""

    RATE = 0x01
    TICK = 0x02
    BITS = 0x03
    TOLERANCE = 0x04
    UNIT_ID = 0x05
    RESET = 0x06
    FIRMWARE = 0x07
    CLOCK = 0x08
    BOOTS = 0x09
    CH_NAME = 0x10
    CH_SCALE = 0x11
    CH_SKEW = 0x12
    CH_UNIT = 0x13
    CH_RAILS = 0x14
    DISCARDED = 0x20
    HIGH_WATER = 0x21
    PULSE_INDEX = 0x30
    PULSE_TICK = 0x31
    MESSAGE = 0x40


# One table drives both directions: tag -> (attribute of Hello, how its number is packed).
HELLO_NUMBERS: tuple[tuple[Tag, str, struct.Struct], ...] = (
    (Tag.RATE, "rate_mhz", struct.Struct("<I")),
    (Tag.TICK, "tick_hz", struct.Struct("<I")),
    (Tag.BITS, "bits", struct.Struct("<B")),
    (Tag.TOLERANCE, "tolerance_ppm", struct.Struct("<H")),
    (Tag.RESET, "reset_cause", struct.Struct("<B")),
    (Tag.CLOCK, "clock", struct.Struct("<B")),
    (Tag.BOOTS, "boot_count", struct.Struct("<I")),
)
HELLO_TEXTS: tuple[tuple[Tag, str], ...] = ((Tag.UNIT_ID, "unit_id"), (Tag.FIRMWARE, "firmware"))
SCALE = struct.Struct("<Bff")
SKEW = struct.Struct("<Bi")
RAILS = struct.Struct("<Bii")
U16 = struct.Struct("<H")
U32 = struct.Struct("<I")


def tagged(payload: bytes) -> list[tuple[int, bytes]]:
    """Tag and value pairs, in order; a value that claims to run past the end is left out."""
    pairs = []
    at = 0
    while at + 2 <= len(payload):
        tag, length = payload[at], payload[at + 1]
        value = payload[at + 2 : at + 2 + length]
        if len(value) == length:
            pairs.append((tag, value))
        at += 2 + length
    return pairs


def parse_hello(payload: bytes, channels: int) -> Hello:
    """What a HELLO says; unknown tags and values of a wrong length are skipped."""
    found: dict[str, object] = {}
    of_channel: list[dict[str, object]] = [{} for _ in range(channels)]
    numbers = {tag: (name, form) for tag, name, form in HELLO_NUMBERS}
    texts = dict(HELLO_TEXTS)
    for code, value in tagged(payload):
        if code in numbers:
            name, form = numbers[Tag(code)]
            if len(value) == form.size:
                (found[name],) = form.unpack(value)
        elif code in texts:
            found[texts[Tag(code)]] = _text(value)
        elif value and value[0] < channels:
            _channel_value(code, value, of_channel[value[0]])
    said = tuple(ChannelHello(**values) for values in of_channel)  # type: ignore[arg-type]
    return Hello(channels=said, **found)  # type: ignore[arg-type]


def _channel_value(code: int, value: bytes, into: dict[str, object]) -> None:
    if code == Tag.CH_NAME:
        into["name"] = _text(value[1:])
    elif code == Tag.CH_UNIT:
        into["unit"] = _text(value[1:], 12)
    elif code == Tag.CH_SCALE and len(value) == SCALE.size:
        _, gain, offset = SCALE.unpack(value)
        # A gain of 0, NaN or infinity would turn every figure into nonsense.
        if np.isfinite(gain) and gain != 0.0 and np.isfinite(offset):
            into["gain"], into["offset"] = gain, offset
    elif code == Tag.CH_SKEW and len(value) == SKEW.size:
        into["skew_ns"] = SKEW.unpack(value)[1]
    elif code == Tag.CH_RAILS and len(value) == RAILS.size:
        _, low, high = RAILS.unpack(value)
        if low < high:
            into["rails"] = (low, high)


def _text(value: bytes, limit: int = 40) -> str:
    return clean(value.decode("utf-8", "replace"), limit)
