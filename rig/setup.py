"""The site's setup: a TOML file that turns counts into volts and amperes.

Everything in it is optional; without any setup the program measures what the source says of
itself, or counts. Each complaint names the line and the fix.
"""

import re
import tomllib
from dataclasses import dataclass

from acquisition.stream import clean
from dsp.waveform import Kind
from rig.errors import SetupError
from rig.fields import Fields
from rig.key_lines import key_lines
from rig.units import likely_meant, si_unit

DEFAULT_LIMIT = 0.02  # an averaging meter misleads beyond 2 % (common practice, no source)
SMALLEST_SCALE = 1e-15  # of a code or more; anything smaller is a slip, and would drown in rounding
MOST_CHANNELS = 32

TOP_KEYS = (
    "site", "nominal_hz", "limit_pct", "declared_v", "reference", "logger", "channel", "pair",
)  # fmt: skip
LOGGER_KEYS = ("format", "type", "channels", "byte_order", "baud", "rate_hz")
CHANNEL_KEYS = (
    "input", "name", "unit", "kind", "gain", "volts_per_code", "adc_bits", "adc_reference_v",
    "divider", "clamp_a_per_v", "offset_codes", "invert", "delay_us", "u_gain_pct", "u_offset",
    "code_min", "code_max",
)  # fmt: skip
PAIR_KEYS = ("voltage", "current")


@dataclass(frozen=True, slots=True)
class ChannelSetup:
    """One channel as the person describes it. Unset fields leave the source its word."""

    input: int | str | None = None  # number from 1, or the source's own name for it
    name: str = ""
    unit: str = ""  # as written, prefix and all
    kind: Kind | None = None
    gain: float | None = None  # unit per code
    offset_codes: float | None = None  # value = gain * (code + offset_codes)
    delay: float | None = None  # s, sampled later than the first channel
    u_gain: float = 0.0  # relative standard uncertainty of the scale
    u_offset: float | None = None  # in unit
    rails: tuple[float, float] | None = None  # lowest and highest code, as told
    adc_bits: int | None = None  # of the converter
    coded: bool = False  # the samples are a converter's codes, so they come in steps of 1
    invert: bool = False  # the source's own scale is turned over; `gain` already has its sign
    line: int | None = None  # where it stands in the file


@dataclass(frozen=True, slots=True)
class Setup:
    """A site's setup."""

    where: str = "no setup"
    site: str = ""
    nominal_hz: float | None = None
    limit: float = DEFAULT_LIMIT  # verdict limit, fraction
    declared_v: float | None = None  # what dips and swells are judged against; None: it slides
    reference: str | None = None  # channel whose cycles cut the windows
    channels: tuple[ChannelSetup, ...] = ()
    pairs: tuple[tuple[str, str], ...] = ()  # (voltage, current) names
    format: str | None = None  # "crestwire", "text", "raw" or "raw:u16:2:little"
    baud: int | None = None
    rate_hz: float | None = None
    reference_line: int | None = None
    pair_lines: tuple[int | None, ...] = ()  # one for each of pairs

    @classmethod
    def empty(cls) -> "Setup":
        """No setup at all."""
        return cls()


def parse(text: str, where: str) -> Setup:
    """Read a setup from its text; `where` names it in messages.

    Raises:
        SetupError: it is not TOML, or says something that cannot be.
    """
    text = text.replace("\r\n", "\n")
    try:
        table = tomllib.loads(text)
        lines = key_lines(text)
    except tomllib.TOMLDecodeError as error:
        raise _not_toml(text, where, error) from None
    except RecursionError:
        raise SetupError(
            where, None, "has brackets in brackets without end", "docs/setup.md shows a setup"
        ) from None
    except ValueError:
        raise SetupError(
            where, None, "holds a number of thousands of digits", "docs/setup.md shows a setup"
        ) from None
    return _setup(Fields(table, (), lines, where))


def _setup(top: Fields) -> Setup:
    top.known(TOP_KEYS)
    logger = top.table("logger")
    logger.known(LOGGER_KEYS)
    rows = top.rows("channel")
    if len(rows) > MOST_CHANNELS:
        raise rows[MOST_CHANNELS].wrong(
            f"there are {len(rows)} channels", f"a logger has {MOST_CHANNELS} at most"
        )
    channels = tuple(_channel(row) for row in rows)
    names = [channel.name for channel in channels]
    for n, name in enumerate(names):
        if name and name in names[:n]:
            raise rows[n].wrong(f"two channels are named {name}", "give each its own name", "name")
    pair_rows = top.rows("pair")
    pairs = tuple(_pair(row) for row in pair_rows)
    for n, pair in enumerate(pairs):
        if pair in pairs[:n]:
            raise pair_rows[n].wrong(f"{' and '.join(pair)} are paired twice", "remove one")
    limit = top.number("limit_pct", 0.01, 100.0)
    return Setup(
        where=top.where,
        site=top.text("site") or "",
        nominal_hz=top.number("nominal_hz", 40.0, 70.0),
        declared_v=top.number("declared_v", 0.1, 1e6),
        limit=DEFAULT_LIMIT if limit is None else limit / 100.0,
        reference=top.text("reference") or None,
        channels=channels,
        pairs=pairs,
        format=_format(logger),
        baud=logger.whole("baud", 50, 20_000_000),
        rate_hz=logger.number("rate_hz", 100.0, 10e6),
        reference_line=top.line_of("reference"),
        pair_lines=tuple(row.line for row in pair_rows),
    )


def _format(logger: Fields) -> str | None:
    """The logger's format, with the particulars that raw words need."""
    name = logger.choice("format", ("crestwire", "text", "raw"))
    kind = logger.choice("type", ("u16", "i16"))
    order = logger.choice("byte_order", ("little", "big"))
    channels = logger.whole("channels", 1, MOST_CHANNELS)
    told = [key for key in ("type", "byte_order", "channels") if key in logger.values]
    if told and name != "raw":
        raise logger.wrong(
            f"{told[0]} is only of use with raw words",
            'write format = "raw", or remove it',
            told[0],
        )
    if told and channels is None:
        raise logger.wrong(
            f"{told[0]} without channels does not describe raw words",
            "write channels = 2, or as many as the logger sends", told[0],
        )  # fmt: skip
    if name is None or channels is None:
        return name
    return f"raw:{kind or 'u16'}:{channels}:{order or 'little'}"


def _channel(row: Fields) -> ChannelSetup:
    row.known(CHANNEL_KEYS)
    kind = row.choice("kind", tuple(Kind))
    delay = row.number("delay_us", -1e6, 1e6)
    unit, gain = _scale(row)
    invert = row.flag("invert")
    rails = _rails(row)
    return ChannelSetup(
        input=_input(row),
        name=row.text("name") or "",
        unit=unit,
        kind=None if kind is None else Kind(kind),
        gain=-gain if gain is not None and invert else gain,
        offset_codes=row.number("offset_codes", -(2.0**31), 2.0**31),
        delay=None if delay is None else delay * 1e-6,
        u_gain=(row.number("u_gain_pct", 0.0, 100.0) or 0.0) / 100.0,
        u_offset=row.number("u_offset", 0.0, 1e9),
        rails=rails,
        adc_bits=row.whole("adc_bits", 6, 32),
        coded=rails is not None or "adc_bits" in row.values or "volts_per_code" in row.values,
        invert=invert and gain is None,
        line=row.line,
    )


def _input(row: Fields) -> int | str | None:
    given = row.values.get("input")
    if isinstance(given, str):
        given = clean(given)
    if given is None or (isinstance(given, str) and given):
        return given
    if isinstance(given, bool) or not isinstance(given, int) or not 1 <= given <= MOST_CHANNELS:
        raise row.wrong(
            f"input is neither a number from 1 to {MOST_CHANNELS} nor a name",
            "write input = 1 for the logger's first channel", "input",
        )  # fmt: skip
    return given


def _rails(row: Fields) -> tuple[float, float] | None:
    low = row.number("code_min", -(2.0**31), 2.0**32)
    high = row.number("code_max", -(2.0**31), 2.0**32)
    if low is None and high is None:
        return None
    if low is None or high is None or low >= high:
        raise row.wrong(
            "code_min and code_max go together, the lower first",
            "give both, such as code_min = 0 and code_max = 4095",
            "code_min" if low is not None else "code_max",
        )
    return low, high


def _scale(row: Fields) -> tuple[str, float | None]:
    """The unit as written and units per code, from whichever way the person knows them."""
    unit = row.text("unit") or ""
    meant = likely_meant(unit)
    if meant is not None:
        raise row.wrong(f"unit {unit} is not known", f'write unit = "{meant}"', "unit")
    direct = row.number("gain", -1e12, 1e12)
    divider = row.number("divider", -1e9, 1e9)
    clamp = row.number("clamp_a_per_v", -1e9, 1e9)
    per_code = row.number("volts_per_code", -1e6, 1e6)
    bits = row.whole("adc_bits", 6, 32)
    reference = row.number("adc_reference_v", 1e-6, 1e6)
    front_end = [key for key in ("divider", "clamp_a_per_v", "volts_per_code") if key in row.values]
    if divider is not None and clamp is not None:
        raise row.wrong(
            "a channel has a divider or a clamp, not both", "remove one", "clamp_a_per_v"
        )
    if direct is not None:
        if front_end:
            raise row.wrong(
                "gain already is unit per code", f"remove gain, or {front_end[0]}", "gain"
            )
        return unit, _not_nothing(row, direct, "gain")
    if per_code is None and bits is not None and reference is not None:
        per_code = reference / 2.0**bits
    if per_code is None:
        if front_end:
            raise row.wrong(
                "a divider or clamp needs to know what a code is worth",
                "give adc_bits and adc_reference_v, or volts_per_code", front_end[0],
            )  # fmt: skip
        return unit, None
    ratio = next((n for n in (divider, clamp) if n is not None), 1.0)
    ratio_key = front_end[0] if front_end else "adc_reference_v"
    comes = "V" if clamp is None else "A"
    bare, worth = si_unit(unit or comes)
    if bare != comes:
        gives = "a clamp gives amperes" if comes == "A" else "the scale gives volts"
        fix = (
            "give clamp_a_per_v for amperes" if bare == "A" else f'write unit = "{comes}", or gain'
        )
        raise row.wrong(f"{gives}, but the unit is {unit}", fix, "unit")
    return unit or comes, _not_nothing(row, per_code * ratio / worth, ratio_key)


def _not_nothing(row: Fields, gain: float, key: str) -> float:
    if abs(gain) < SMALLEST_SCALE:
        raise row.wrong("the scale is 0", "give a scale that is not 0", key)
    return gain


def _pair(row: Fields) -> tuple[str, str]:
    row.known(PAIR_KEYS)
    voltage, current = row.text("voltage"), row.text("current")
    if not voltage or not current:
        raise row.wrong(
            "a pair names a voltage and a current", 'write voltage = "NAME" and current = "NAME"'
        )
    if voltage == current:
        raise row.wrong(
            f"{voltage} is paired with itself", "name a voltage and a current", "current"
        )
    return voltage, current


def _not_toml(text: str, where: str, error: tomllib.TOMLDecodeError) -> SetupError:
    found = re.search(r"^(.*) \(at line (\d+), column (\d+)\)$", str(error))
    what = found[1] if found else str(error).removesuffix(" (at end of document)")
    line = int(found[2]) if found else text.rstrip("\n").count("\n") + 1
    column = f" at column {found[3]}" if found else ""
    rows = text.split("\n")
    return SetupError(
        where,
        line,
        f"does not read as TOML{column}: {clean(what, 120)}",
        "remove one of the two lines that say it"
        if "overwrite" in what
        else _slip(rows[line - 1] if line <= len(rows) else ""),
    )


def _slip(row: str) -> str:
    """What to do about a line that is no TOML, by the slips that people make."""
    row = clean(row, 200)
    key, equals, value = (part.strip() for part in row.partition("="))
    if not equals:
        head = re.fullmatch(r"\[+\s*(\w+)\s*\]*", row)
        if head is not None and head[1] in ("channel", "pair"):
            return f"write [[{head[1]}]] with two brackets on each side"
        if head is not None:
            return f"write [{head[1]}], once in the file"
        return "write a key, an equals sign and a value; docs/setup.md shows a setup"
    number = re.match(r"[+-]?\d+,\d+", value)
    if number is not None:
        return f"write numbers with a point: {key} = {number[0].replace(',', '.')}"
    number = re.match(r"[+-]?\d+(?:\.\d+)?(?=\s*[^\d\s.#e_-])", value)
    if number is not None:
        return f"write the number alone: {key} = {number[0]}"
    if re.match(r"[^\W\d]", value) and value.split("#")[0].strip() not in ("true", "false"):
        return f'write text in quotes: {key} = "{value.split("#")[0].strip()}"'
    if re.fullmatch(r"\"[^\"]*|'[^']*", value):
        return "close the quotes"
    return "docs/setup.md shows a setup"
