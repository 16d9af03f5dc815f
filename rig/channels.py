"""Which channels there are: the setup's word first, then the source's, then counts."""

import re
from collections.abc import Sequence

from acquisition.stream import ChannelHint, StreamInfo
from dsp.waveform import Channel, Kind
from rig.errors import SetupError
from rig.setup import ChannelSetup, Setup

COUNTS = "counts"
_PREFIXES = {"M": 1e6, "k": 1e3, "": 1.0, "m": 1e-3, "u": 1e-6, "µ": 1e-6}


def describe(setup: Setup, info: StreamInfo) -> tuple[Channel, ...]:
    """The channels of a stream, in its order.

    Raises:
        SetupError: the setup names an input that the stream does not have.
    """
    return tuple(
        _channel(said, hint) for said, hint in zip(matched(setup, info), info.channels, strict=True)
    )


def matched(setup: Setup, info: StreamInfo) -> tuple[ChannelSetup, ...]:
    """What the setup says of each of the stream's channels; an empty word where it says nothing."""
    names = [hint.name for hint in info.channels]
    found: list[ChannelSetup | None] = [None] * len(names)
    for position, channel in enumerate(setup.channels):
        at = _place(channel, position, names)
        if at is None:
            sought = channel.input if channel.input is not None else position + 1
            there = ", ".join(f"{n} ({name})" for n, name in enumerate(names, 1))
            raise SetupError(
                setup.where,
                channel.line,
                f"there is no input {sought} in this stream",
                f"it has {len(names)}: {there}",
            )
        if found[at] is not None:
            raise SetupError(
                setup.where,
                channel.line,
                f"input {at + 1} is described twice",
                "give each channel its own input",
            )
        found[at] = channel
    return tuple(one or ChannelSetup() for one in found)


def _place(channel: ChannelSetup, position: int, names: list[str]) -> int | None:
    if isinstance(channel.input, int):
        return channel.input - 1 if channel.input <= len(names) else None
    if isinstance(channel.input, str):
        return names.index(channel.input) if channel.input in names else None
    if channel.name in names:
        return names.index(channel.name)
    return position if position < len(names) else None


def scale(said: ChannelSetup, hint: ChannelHint) -> tuple[float, float, str]:
    """Unit per code, offset in codes, and the unit, without prefix."""
    offset = said.offset_codes if said.offset_codes is not None else hint.offset_codes
    if said.gain is not None:
        unit, worth = si_unit(said.unit)
        return said.gain * worth, offset, unit
    if hint.gain is not None:
        unit, worth = si_unit(hint.unit)
        return hint.gain * worth, offset, unit or si_unit(said.unit)[0]
    return 1.0, offset, COUNTS


def si_unit(unit: str) -> tuple[str, float]:
    """A unit without its prefix, and what the prefix is worth: "kV" -> ("V", 1000.0)."""
    found = re.fullmatch(r"([MkmuµK]?)(V|A)", unit.strip())
    if found is None:
        return unit.strip(), 1.0
    prefix = "k" if found[1] == "K" else found[1]
    return found[2], _PREFIXES[prefix]


def kind_of(unit: str) -> Kind:
    """What a unit measures."""
    bare, _ = si_unit(unit)
    return Kind.VOLTAGE if bare == "V" else Kind.CURRENT if bare == "A" else Kind.OTHER


def pairs(setup: Setup, channels: Sequence[Channel]) -> tuple[tuple[int, int], ...]:
    """Voltage/current pairs by position: the setup's, else a lone voltage with every current.

    Raises:
        SetupError: the setup names a channel that is not there.
    """
    names = [channel.name for channel in channels]
    if setup.pairs:
        for name in (name for pair in setup.pairs for name in pair):
            if name not in names:
                raise SetupError(
                    setup.where,
                    None,
                    f"a pair names {name}, which is no channel here",
                    f"there are {', '.join(names)}",
                )
        return tuple((names.index(v), names.index(i)) for v, i in setup.pairs)
    voltages = [k for k, channel in enumerate(channels) if channel.kind is Kind.VOLTAGE]
    currents = [k for k, channel in enumerate(channels) if channel.kind is Kind.CURRENT]
    if len(voltages) == 1 and len(currents) == 1:
        return ((voltages[0], currents[0]),)
    # Several: only names that say so belong together ("way 3 V", "way 3 A"; "VA", "IA").
    return tuple(
        (v, i)
        for v in voltages
        for i in currents
        if _stem(names[v], "VU") and _stem(names[v], "VU") == _stem(names[i], "IA")
    )


def _stem(name: str, letters: str) -> str:
    found = re.fullmatch(rf"(.*?)[\s_]+[{letters}]|[{letters}](.+)", name.strip())
    return (found[1] or found[2] or "") if found else ""


def reference(setup: Setup, channels: Sequence[Channel]) -> int:
    """The channel whose cycles cut the windows: the setup's, else the first voltage, else 0.

    Raises:
        SetupError: the setup names a channel that is not there.
    """
    if setup.reference is not None:
        names = [channel.name for channel in channels]
        if setup.reference not in names:
            raise SetupError(
                setup.where,
                None,
                f"the reference {setup.reference} is no channel here",
                f"there are {', '.join(names)}",
            )
        return names.index(setup.reference)
    for k, channel in enumerate(channels):
        if channel.kind is Kind.VOLTAGE:
            return k
    return 0


def advice(setup: Setup, channels: Sequence[Channel]) -> tuple[str, ...]:
    """Sentences on what a setup would improve."""
    counts = [channel.name for channel in channels if channel.unit == COUNTS]
    if not counts:
        return ()
    what = (
        "All channels are"
        if len(counts) == len(channels)
        else ", ".join(counts) + (" is" if len(counts) == 1 else " are")
    )
    return (f"{what} in counts: a setup with --setup gives volts and amperes (docs/setup.md).",)


def _channel(said: ChannelSetup, hint: ChannelHint) -> Channel:
    gain, offset, unit = scale(said, hint)
    step = 1.0 if hint.step is None and said.gain is not None else (hint.step or 0.0)
    low, high = float("-inf"), float("inf")
    rails = said.rails or hint.rails
    if rails is not None:
        low, high = sorted(gain * (code + offset) for code in rails)
    return Channel(
        name=said.name or hint.name,
        unit=unit,
        kind=said.kind if said.kind is not None else kind_of(unit),
        step=abs(gain) * step,
        low=low,
        high=high,
        u_gain=said.u_gain,
        u_offset=said.u_offset or abs(gain) * hint.u_offset_codes,
        delay=said.delay or hint.skew_s,
    )
