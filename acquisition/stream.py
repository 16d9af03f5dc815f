"""StreamInfo: what a source says of itself, before any setup has its word.

Strings here were cleaned where they entered (`clean`): printable, bounded.
"""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class ChannelHint:
    """What the source says of one channel. value = gain * (code + offset_codes)."""

    name: str
    unit: str = ""  # "" means raw counts
    gain: float | None = None  # unit per code; None: not told
    offset_codes: float = 0.0
    rails: tuple[float, float] | None = None  # lowest and highest code of the converter
    skew_s: float = 0.0  # sampled this much later than channel 0
    u_offset_codes: float = 0.0  # standard uncertainty of the zero, when it was assumed
    step: float | None = None  # code step, 1 for a converter; None when the values are continuous


@dataclass(frozen=True, slots=True)
class StreamInfo:
    """What a source says of the whole stream."""

    format: str  # "crestwire", "text", "raw", "csv", "wav", "comtrade", "npz", "flac"
    channels: tuple[ChannelHint, ...]
    rate: float | None = None  # sets a second as declared; None: not told
    rate_tolerance_ppm: float | None = None
    sample_type: str = ""  # "u16", "i16", "i24", "i32", "f32", "text", "float64" …
    byte_order: str = ""  # "little", "big" or ""
    bits: int | None = None  # of the converter
    nominal_hz: float | None = None  # mains frequency, when the source tells
    started: str | None = None  # ISO 8601, when the source tells
    unit_id: str = ""
    firmware: str = ""
    notes: tuple[str, ...] = ()  # sentences for the person: lines skipped, guesses made


def clean(text: str, limit: int = 40) -> str:
    """Outside text made harmless: printable characters only, spaces folded, at most `limit`.

    Used once, where the text enters; nothing later needs to escape it for a terminal.
    """
    kept = "".join(c if c.isprintable() else " " for c in text[: limit * 8])
    kept = " ".join(kept.split())
    return kept if len(kept) <= limit else kept[: limit - 1] + "…"
