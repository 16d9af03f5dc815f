"""What a crestwire stream says of itself: the shape of its frames and its latest HELLO, joined."""

from acquisition.stream import ChannelHint, StreamInfo
from acquisition.wire.crestwire_frame import Hello, SampleType

WIDEST = 32  # bits of a converter; more is a mistake


def stream_info(
    channels: int, kind: SampleType, hello: Hello, notes: tuple[str, ...]
) -> StreamInfo:
    """Join the two; a channel that HELLO does not name is ch1, ch2, …"""
    bits = hello.bits if hello.bits and hello.bits <= WIDEST else None
    return StreamInfo(
        format="crestwire",
        channels=tuple(_hint(c, kind, hello, bits) for c in range(channels)),
        rate=hello_rate(hello),
        rate_tolerance_ppm=hello.tolerance_ppm,
        sample_type=kind.name,
        byte_order="little",
        bits=bits,
        unit_id=hello.unit_id,
        firmware=hello.firmware,
        notes=notes,
    )


def hello_rate(hello: Hello) -> float | None:
    """Sets a second as told, or None."""
    return hello.rate_mhz / 1000.0 if hello.rate_mhz else None


def _hint(c: int, kind: SampleType, hello: Hello, bits: int | None) -> ChannelHint:
    step = None if kind.name == "f32" else 1.0
    rails = _rails(kind, bits)
    if c >= len(hello.channels):
        return ChannelHint(f"ch{c + 1}", rails=rails, step=step)
    said = hello.channels[c]
    return ChannelHint(
        name=said.name or f"ch{c + 1}",
        unit=said.unit if said.gain is not None else "",
        gain=said.gain,
        offset_codes=said.offset,
        rails=(float(said.rails[0]), float(said.rails[1])) if said.rails else rails,
        skew_s=(said.skew_ns or 0) * 1e-9,
        step=step,
    )


def _rails(kind: SampleType, bits: int | None) -> tuple[float, float] | None:
    """Lowest and highest code of a converter of so many bits."""
    if bits is None or kind.name == "f32":
        return None
    if kind.signed:
        return (-(2.0 ** (bits - 1)), 2.0 ** (bits - 1) - 1.0)
    return (0.0, 2.0**bits - 1.0)
