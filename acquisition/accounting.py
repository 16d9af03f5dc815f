"""The account of a stream: received + declared lost = sent, as far as its format can tell."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Tally:
    """Counts since the stream began. A new one replaces the old; nothing is changed in place.

    `lost` is None for a format that cannot tell (text, raw): unknown, which is not 0.
    """

    received: int = 0  # sets
    lost: int | None = 0  # sets
    discarded_in_logger: int = 0  # sets, part of `lost`: the logger said so
    bad_frames: int = 0  # units (frames, lines) refused
    duplicates: int = 0
    discarded_bytes: int = 0
    invalid_sets: int = 0  # NaN or infinite float samples
    reconnects: int = 0
    reboots: int = 0
    tail_unknown_sets: int = 0  # upper bound of what a rebooting logger may have taken along
    host_overrun: int = 0  # sets dropped here because the ring was full, part of `lost`
