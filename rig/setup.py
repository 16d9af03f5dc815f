"""The site's setup: a TOML file that turns counts into volts and amperes.

Everything in it is optional; without any setup the program measures what the source says of
itself, or counts. Each complaint names the line and the fix.
"""

import difflib
import math
import re
import tomllib
from dataclasses import dataclass
from typing import Any

from acquisition.stream import clean
from dsp.waveform import Kind
from rig.errors import SetupError

DEFAULT_LIMIT = 0.02  # an averaging meter misleads beyond 2 % (common practice, no source)

Table = dict[str, Any]


@dataclass(frozen=True, slots=True)
class ChannelSetup:
    """One channel as the person describes it. Unset fields leave the source its word."""

    input: int | str | None = None  # number from 1, or the source's own name for it
    name: str = ""
    unit: str = ""
    kind: Kind | None = None
    gain: float | None = None  # unit per code
    offset_codes: float | None = None  # value = gain * (code + offset_codes)
    delay: float = 0.0  # s, sampled later than the first channel
    u_gain: float = 0.0  # relative standard uncertainty of the scale
    u_offset: float = 0.0  # in unit
    rails: tuple[float, float] | None = None  # lowest and highest code
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
    format: str | None = None
    baud: int | None = None
    rate_hz: float | None = None

    @classmethod
    def empty(cls) -> "Setup":
        """No setup at all."""
        return cls()


def parse(text: str, where: str) -> Setup:
    """Read a setup from its text; `where` names it in messages.

    Raises:
        SetupError: it is not TOML, or says something that cannot be.
    """
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"^(.*) \(at line (\d+), column (\d+)\)$", str(error))
        what = found[1] if found else str(error).removesuffix(" (at end of document)")
        line = int(found[2]) if found else text.count("\n") + 1
        raise SetupError(
            where, line, f"does not read as TOML: {clean(what, 120)}", "docs/setup.md shows a setup"
        ) from None
    return _Reader(text, where).setup(table)


class _Reader:
    """Takes a parsed table apart and knows the line of every complaint."""

    def __init__(self, text: str, where: str) -> None:
        self._lines = text.splitlines()
        self._where = where

    def setup(self, table: Table) -> Setup:
        self._known(table, ("site", "nominal_hz", "limit_pct", "declared_v", "reference", "logger",
                            "channel", "pair"), 0)  # fmt: skip
        logger = self._table(table, "logger")
        at = self._line("[logger]")
        self._known(logger, ("format", "baud", "rate_hz"), at or 0)
        rows = self._rows(table, "channel")
        channels = tuple(
            self._channel(row, line)
            for row, line in zip(rows, self._heads("[[channel]]", len(rows)), strict=True)
        )
        names = [c.name for c in channels if c.name]
        for name in names:
            if names.count(name) > 1:
                raise self._wrong(
                    f"two channels are named {name}", "give each its own name", f'"{name}"'
                )
        pair_rows = self._rows(table, "pair")
        heads = self._heads("[[pair]]", len(pair_rows))
        pairs = tuple(self._pair(row, line) for row, line in zip(pair_rows, heads, strict=True))
        limit = self._number(table, "limit_pct", 0.01, 100.0)
        format_ = self._text(logger, "format")
        if format_ is not None and format_ not in ("crestwire", "text", "raw"):
            raise self._wrong(
                f"format {format_} is not known", "use crestwire, text or raw", "format"
            )
        baud = self._number(logger, "baud", 50, 20e6)
        return Setup(
            where=self._where,
            site=self._text(table, "site") or "",
            nominal_hz=self._number(table, "nominal_hz", 40.0, 70.0),
            declared_v=self._number(table, "declared_v", 0.1, 1e6),
            limit=DEFAULT_LIMIT if limit is None else limit / 100.0,
            reference=self._text(table, "reference"),
            channels=channels,
            pairs=pairs,
            format=format_,
            baud=None if baud is None else int(baud),
            rate_hz=self._number(logger, "rate_hz", 100.0, 10e6),
        )

    _CHANNEL_KEYS = (
        "input", "name", "unit", "kind", "gain", "volts_per_code", "adc_bits", "adc_reference_v",
        "divider", "clamp_a_per_v", "offset_codes", "invert", "delay_us", "u_gain_pct", "u_offset",
        "code_min", "code_max",
    )  # fmt: skip

    def _channel(self, row: Table, line: int | None) -> ChannelSetup:
        start = (line or 1) - 1
        self._known(row, self._CHANNEL_KEYS, start)
        unit = self._text(row, "unit", start)
        kind = self._text(row, "kind", start)
        if kind is not None and kind not in tuple(Kind):
            raise self._wrong(
                f"kind {kind} is not known", "use voltage, current or other", "kind", start
            )
        low = self._number(row, "code_min", -(2.0**31), 2.0**31, start)
        high = self._number(row, "code_max", -(2.0**31), 2.0**31, start)
        if (low is None) != (high is None) or (
            low is not None and high is not None and low >= high
        ):
            raise self._wrong(
                "code_min and code_max go together, the lower first",
                "give both, such as code_min = 0 and code_max = 4095", "code_m", start,
            )  # fmt: skip
        given = row.get("input")
        if given is not None and (
            isinstance(given, bool)
            or not isinstance(given, int | str)
            or (isinstance(given, int) and not 1 <= given <= 32)
        ):
            raise self._wrong(
                "input is neither a number from 1 to 32 nor a name",
                "write input = 1 for the logger's first channel", "input", start,
            )  # fmt: skip
        gain = self._gain(row, start)
        bits = self._number(row, "adc_bits", 6, 32, start)
        rails = None
        if low is not None and high is not None:
            rails = (low, high)
        elif bits is not None:
            rails = (0.0, 2.0**bits - 1.0)
        if row.get("invert") is True and gain is None:
            raise self._wrong("invert needs a scale", "give gain or divider too", "invert", start)
        return ChannelSetup(
            input=clean(given) if isinstance(given, str) else given,
            name=self._text(row, "name", start) or "",
            unit=unit or self._unit_of_front_end(row),
            kind=None if kind is None else Kind(kind),
            gain=gain,
            offset_codes=self._number(row, "offset_codes", -(2.0**31), 2.0**31, start),
            delay=(self._number(row, "delay_us", -1e6, 1e6, start) or 0.0) * 1e-6,
            u_gain=(self._number(row, "u_gain_pct", 0.0, 100.0, start) or 0.0) / 100.0,
            u_offset=self._number(row, "u_offset", 0.0, 1e9, start) or 0.0,
            rails=rails,
            line=line,
        )

    @staticmethod
    def _unit_of_front_end(row: Table) -> str:
        if "divider" in row:
            return "V"
        return "A" if "clamp_a_per_v" in row else ""

    def _gain(self, row: Table, start: int) -> float | None:
        """Unit per code, from whichever way the person knows it."""
        direct = self._number(row, "gain", -1e12, 1e12, start)
        per_code = self._number(row, "volts_per_code", -1e6, 1e6, start)
        bits = self._number(row, "adc_bits", 6, 32, start)
        reference = self._number(row, "adc_reference_v", 1e-6, 1e6, start)
        divider = self._number(row, "divider", -1e9, 1e9, start)
        clamp = self._number(row, "clamp_a_per_v", -1e9, 1e9, start)
        if divider is not None and clamp is not None:
            raise self._wrong(
                "a channel has a divider or a clamp, not both", "remove one", "clamp_a_per_v", start
            )
        ratio = divider if divider is not None else clamp
        if direct is not None:
            if ratio is not None or per_code is not None:
                raise self._wrong(
                    "gain already is unit per code", "remove divider, clamp and volts_per_code",
                    "gain", start,
                )  # fmt: skip
            gain = direct
        else:
            if per_code is None and bits is not None and reference is not None:
                per_code = reference / 2.0**bits
            if per_code is None:
                if ratio is None:
                    return None
                raise self._wrong(
                    "a divider or clamp needs to know what a code is worth",
                    "give adc_bits and adc_reference_v, or volts_per_code",
                    "divider" if divider is not None else "clamp_a_per_v", start,
                )  # fmt: skip
            gain = per_code * (1.0 if ratio is None else ratio)
        if gain == 0.0:
            raise self._wrong("the scale is 0", "give a scale that is not 0", "gain", start)
        return -gain if row.get("invert") is True else gain

    def _pair(self, row: Table, line: int | None) -> tuple[str, str]:
        start = (line or 1) - 1
        self._known(row, ("voltage", "current"), start)
        voltage, current = (self._text(row, key, start) for key in ("voltage", "current"))
        if not voltage or not current:
            raise self._wrong(
                "a pair names a voltage and a current",
                'write voltage = "NAME" and current = "NAME"', "[[pair]]", start,
            )  # fmt: skip
        return voltage, current

    def _known(self, table: Table, keys: tuple[str, ...], start: int) -> None:
        for key in table:
            if key not in keys:
                near = difflib.get_close_matches(key, keys, 1)
                fix = f"did you mean {near[0]}?" if near else f"known here: {', '.join(keys)}"
                raise self._wrong(f"{clean(key)} is not known here", fix, key, start)

    def _number(
        self, table: Table, key: str, low: float, high: float, start: int = 0
    ) -> float | None:
        value = table.get(key)
        if value is None:
            return None
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self._wrong(f"{key} is not a number", f"write {key} = 1.0", key, start)
        if not math.isfinite(value) or not low <= value <= high:
            raise self._wrong(
                f"{key} = {value:g} is out of range",
                f"it lies from {low:g} to {high:g}",
                key,
                start,
            )
        return float(value)

    def _text(self, table: Table, key: str, start: int = 0) -> str | None:
        value = table.get(key)
        if value is None:
            return None
        if not isinstance(value, str):
            raise self._wrong(f"{key} is not text", f'write {key} = "…" in quotes', key, start)
        return clean(value)

    def _table(self, table: Table, key: str) -> Table:
        value = table.get(key, {})
        if not isinstance(value, dict):
            raise self._wrong(f"{key} is not a table", f"write [{key}] on a line of its own", key)
        return value

    def _rows(self, table: Table, key: str) -> list[Table]:
        value = table.get(key, [])
        if not isinstance(value, list) or not all(isinstance(row, dict) for row in value):
            raise self._wrong(
                f"{key} is not a list of tables", f"write [[{key}]] with two brackets", key
            )
        return value

    def _heads(self, head: str, count: int) -> list[int | None]:
        lines: list[int | None] = [
            n for n, line in enumerate(self._lines, 1) if line.strip().startswith(head)
        ]
        return (lines + [None] * count)[:count]

    def _wrong(self, what: str, fix: str, sought: str, start: int = 0) -> SetupError:
        return SetupError(self._where, self._line(sought, start), what, fix)

    def _line(self, sought: str, start: int = 0) -> int | None:
        """Line on which `sought` stands, from line `start` on."""
        for n, line in enumerate(self._lines[start:], start + 1):
            if line.lstrip().startswith(sought) or line.lstrip().startswith(f'"{sought}"'):
                return n
        for n, line in enumerate(self._lines[start:], start + 1):
            if sought in line:
                return n
        return None
