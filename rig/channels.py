"""Which channels there are: the setup's word first, then the source's, then counts."""

import re
from collections.abc import Sequence

from acquisition.recordings.placing import unique
from acquisition.stream import ChannelHint, StreamInfo
from dsp.waveform import Channel, Kind
from rig.errors import SetupError
from rig.setup import ChannelSetup, Setup
from rig.units import kind_of, si_unit

COUNTS = "counts"


def describe(setup: Setup, info: StreamInfo) -> tuple[Channel, ...]:
    """The channels of a stream, in its order, each with a name of its own.

    Raises:
        SetupError: the setup names an input that the stream does not have, gives two channels one
            name, or calls amperes what the source calls volts.
    """
    told = tuple(zip(matched(setup, info), info.channels, strict=True))
    names = [said.name or hint.name for said, hint in told]
    for said, hint in told:
        _agree(setup, said, hint)
        if said.name and names.count(said.name) > 1:
            raise SetupError(
                setup.where,
                said.line,
                f"{said.name} is also the logger's own name for another channel",
                "give one of the two another name",
            )
    # Records and pairs go by names, so what the source names twice is numbered.
    return tuple(
        _channel(name, said, hint, info.sample_type)
        for name, (said, hint) in zip(unique(names), told, strict=True)
    )


def _agree(setup: Setup, said: ChannelSetup, hint: ChannelHint) -> None:
    """Refuse a unit without a scale where the source has both and they differ."""
    theirs, ours = si_unit(hint.unit)[0], si_unit(said.unit)[0]
    if said.gain is None and hint.gain is not None and theirs and ours and theirs != ours:
        raise SetupError(
            setup.where,
            said.line,
            f'{said.name or hint.name} comes in {theirs}, which unit = "{said.unit}" does not turn '
            f"into {ours}",
            f"add gain, what one code is worth in {said.unit}, or remove unit",
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
        unit, worth = si_unit(said.unit or hint.unit)
        return said.gain * worth, offset, unit
    turned = -1.0 if said.invert else 1.0
    if hint.gain is not None:
        # A source that gives numbers and no unit takes the setup's, prefix and all.
        unit, worth = si_unit(hint.unit or said.unit)
        return turned * hint.gain * worth, offset, unit
    return turned, offset, COUNTS


def pairs(setup: Setup, channels: Sequence[Channel]) -> tuple[tuple[int, int], ...]:
    """Voltage/current pairs by position: the setup's, else what is plain.

    Plain are one voltage with one current, and names that differ in nothing but the quantity. One
    voltage is not paired with several currents: at a three-phase board that would be wrong power.

    Raises:
        SetupError: the setup names a channel that is not there, or a current for a voltage.
    """
    names = [channel.name for channel in channels]
    if setup.pairs:
        return tuple(_said_pair(setup, n, channels) for n in range(len(setup.pairs)))
    voltages = [k for k, channel in enumerate(channels) if channel.kind is Kind.VOLTAGE]
    currents = [k for k, channel in enumerate(channels) if channel.kind is Kind.CURRENT]
    if len(voltages) == 1 and len(currents) == 1:
        return ((voltages[0], currents[0]),)
    stems = [_stem(names[v], _VOLTAGE_WORDS) for v in voltages]
    return tuple(
        (v, i)
        for v, stem in zip(voltages, stems, strict=True)
        for i in currents
        if stem and stems.count(stem) == 1 and stem == _stem(names[i], _CURRENT_WORDS)
    )


_VOLTAGE_WORDS = ("voltage|volts|[VUvu]", "[VU]")
_CURRENT_WORDS = ("current|amps|[IAia]", "I")


def _stem(name: str, words: tuple[str, str]) -> str:
    """A name without its word for the quantity: "way 3 V", "voltage L1", "U_L1" and "VA" have one.

    Args:
        words: patterns of a word that stands apart, and of a letter that may begin a short name.
    """
    apart, letter = words
    for pattern in (
        rf"(.+?)[\s_-]+(?:{apart})",
        rf"(?:{apart})[\s_-]+(.+)",
        rf"{letter}(\w{{1,3}})",
    ):
        found = re.fullmatch(pattern, name.strip())
        if found is not None:
            return found[1].casefold()
    return ""


def _said_pair(setup: Setup, n: int, channels: Sequence[Channel]) -> tuple[int, int]:
    line = setup.pair_lines[n] if n < len(setup.pair_lines) else None
    names = [channel.name for channel in channels]
    places = []
    for name, wanted, other in zip(
        setup.pairs[n], ("voltage", "current"), (Kind.CURRENT, Kind.VOLTAGE), strict=True
    ):
        if name not in names:
            raise SetupError(
                setup.where,
                line,
                f"a pair names {name}, which is no channel here",
                f"there are {', '.join(names)}",
            )
        places.append(names.index(name))
        if channels[places[-1]].kind is other:
            raise SetupError(
                setup.where,
                line,
                f"a pair names {name} for its {wanted}, but that is a {other}",
                f'swap the two, or give {name} kind = "{wanted}"',
            )
    return places[0], places[1]


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
                setup.reference_line,
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
    if not setup.channels:
        return (f"{what} in counts: a setup with --setup gives volts and amperes (docs/setup.md).",)
    return (
        f"{what} in counts: {setup.where} does not say what a code is worth, with gain, or with "
        "adc_bits, adc_reference_v and divider or clamp_a_per_v (docs/setup.md).",
    )


def _channel(name: str, said: ChannelSetup, hint: ChannelHint, sample_type: str) -> Channel:
    gain, offset, unit = scale(said, hint)
    low, high = float("-inf"), float("inf")
    rails = said.rails or _rails_of(said, sample_type, offset) or hint.rails
    if rails is not None:
        low, high = sorted(gain * (code + offset) for code in rails)
    u_offset = abs(gain) * hint.u_offset_codes
    if said.u_offset is not None:
        u_offset = said.u_offset * si_unit(said.unit or hint.unit)[1]
    return Channel(
        name=name,
        unit=unit,
        kind=said.kind if said.kind is not None else kind_of(unit),
        step=abs(gain) * (1.0 if said.coded else hint.step or 0.0),
        low=low,
        high=high,
        u_gain=said.u_gain,
        u_offset=u_offset,
        delay=hint.skew_s if said.delay is None else said.delay,
    )


def _rails_of(said: ChannelSetup, sample_type: str, offset: float) -> tuple[float, float] | None:
    """The rails of a converter of so many bits; signed when the stream's words are."""
    if said.adc_bits is None:
        return None
    codes = 2.0**said.adc_bits
    if sample_type.startswith("i"):
        return (-codes / 2.0, codes / 2.0 - 1.0)
    if not sample_type.startswith("u") and abs(offset) < 0.1 * codes:
        # Printed numbers about 0 may be signed or not: both must fit, or a good wave is "clipped".
        return (-codes / 2.0, codes - 1.0)
    return (0.0, codes - 1.0)
