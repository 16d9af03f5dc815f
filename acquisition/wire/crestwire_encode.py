"""crestwire 1, the encoder: what a logger sends. The inverse of `crestwire.py`.

Pure functions of their arguments; the caller keeps sequence, index and tick and wraps them.
"""

import zlib

import numpy as np
import numpy.typing as npt
from cobs import cobs

from acquisition.wire.crestwire_frame import (
    BODY_LIMIT,
    BY_NAME,
    CHANNEL_LIMIT,
    CRC,
    HEADER,
    HELLO_NUMBERS,
    RAILS,
    SCALE,
    SKEW,
    U16,
    U32,
    VERSION,
    Hello,
    Kind,
    Tag,
    pack_samples,
)


def sets_that_fit(channels: int, sample_type: str) -> int:
    """The most sets that one DATA frame may carry."""
    return (BODY_LIMIT - HEADER.size) // (channels * BY_NAME[sample_type].width)


def encode_data(
    codes: npt.NDArray[np.generic],
    *,
    boot: int,
    sequence: int,
    index: int,
    tick: int,
    sample_type: str = "u16",
    flags: int = 0,
) -> bytes:
    """A DATA frame.

    Args:
        codes: (channels, sets); sets may be 0, a heartbeat.
        index: of the first set, as the logger counts triggers.
        tick: the logger's clock at that set.
    Raises:
        ValueError: more sets than a frame may hold, or channels out of 1..32.
    """
    kind = BY_NAME[sample_type]
    channels, sets = codes.shape
    return encode_frame(
        Kind.DATA,
        pack_samples(codes, kind),
        boot=boot,
        sequence=sequence,
        index=index,
        tick=tick,
        channels=channels,
        sample_code=kind.code,
        flags=flags,
        count=sets,
    )


def encode_hello(
    hello: Hello,
    *,
    boot: int,
    sequence: int,
    index: int,
    tick: int,
    channels: int,
    sample_type: str = "u16",
) -> bytes:
    """A HELLO frame; `index` and `tick` are those of the next set.

    Raises:
        ValueError: it does not fit a frame.
    """
    parts = []
    for tag, name, form in HELLO_NUMBERS:
        number = getattr(hello, name)
        if number is not None:
            parts.append(_tagged(tag, form.pack(number)))
    if hello.unit_id:
        parts.append(_tagged(Tag.UNIT_ID, hello.unit_id.encode()))
    for c, channel in enumerate(hello.channels):
        if channel.name:
            parts.append(_tagged(Tag.CH_NAME, bytes([c]) + channel.name.encode()))
        if channel.gain is not None:
            parts.append(_tagged(Tag.CH_SCALE, SCALE.pack(c, channel.gain, channel.offset)))
        if channel.skew_ns is not None:
            parts.append(_tagged(Tag.CH_SKEW, SKEW.pack(c, channel.skew_ns)))
        if channel.unit:
            parts.append(_tagged(Tag.CH_UNIT, bytes([c]) + channel.unit.encode()))
        if channel.rails is not None:
            parts.append(_tagged(Tag.CH_RAILS, RAILS.pack(c, *channel.rails)))
    if hello.firmware:
        parts.append(_tagged(Tag.FIRMWARE, hello.firmware.encode()))
    return encode_frame(
        Kind.HELLO,
        b"".join(parts),
        boot=boot,
        sequence=sequence,
        index=index,
        tick=tick,
        channels=channels,
        sample_code=BY_NAME[sample_type].code,
    )


def status_payload(discarded: int, high_water: int) -> bytes:
    """Payload of a STATUS: sets discarded since boot, and how full the buffer was at worst."""
    return _tagged(Tag.DISCARDED, U32.pack(discarded & 0xFFFFFFFF)) + _tagged(
        Tag.HIGH_WATER, U16.pack(high_water & 0xFFFF)
    )


def pulse_payload(index: int, tick: int) -> bytes:
    """Payload of a PULSE: which set and tick a clock pulse fell on."""
    return _tagged(Tag.PULSE_INDEX, U32.pack(index & 0xFFFFFFFF)) + _tagged(
        Tag.PULSE_TICK, U32.pack(tick & 0xFFFFFFFF)
    )


def text_payload(message: str) -> bytes:
    """Payload of a TEXT: what the logger wants to say to a person, 255 bytes at most."""
    return _tagged(Tag.MESSAGE, message.encode()[:255])


def encode_frame(
    kind: int,
    payload: bytes,
    *,
    boot: int,
    sequence: int,
    index: int,
    tick: int,
    channels: int,
    sample_code: int,
    flags: int = 0,
    count: int | None = None,
    version: int = VERSION,
) -> bytes:
    """Any frame, 00 at both ends. `count` defaults to the payload's bytes.

    Raises:
        ValueError: the body would be over 2048 bytes, or channels out of 1..32.
    """
    if not 1 <= channels <= CHANNEL_LIMIT:
        raise ValueError(f"{channels} channels; a frame carries 1 to {CHANNEL_LIMIT}")
    body = (
        HEADER.pack(
            version << 4 | kind,
            boot & 0xFF,
            sequence & 0xFFFF,
            index & 0xFFFFFFFF,
            tick & 0xFFFFFFFF,
            channels,
            sample_code,
            flags,
            0,
            len(payload) if count is None else count,
        )
        + payload
    )
    if len(body) > BODY_LIMIT:
        raise ValueError(f"a body of {len(body)} bytes; a frame carries at most {BODY_LIMIT}")
    encoded: bytes = cobs.encode(body + CRC.pack(zlib.crc32(body)))
    return b"\0" + encoded + b"\0"


def _tagged(tag: int, value: bytes) -> bytes:
    if len(value) > 255:
        raise ValueError(f"tag {tag:#04x} carries {len(value)} bytes; at most 255 fit")
    return bytes([tag, len(value)]) + value
