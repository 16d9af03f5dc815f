"""Arguments that several commands share, and how their values are read."""

import argparse
import math
import re
from pathlib import Path

_UNITS = {"": 1.0, "ms": 0.001, "s": 1.0, "min": 60.0, "m": 60.0, "h": 3600.0}


def add_setup(parser: argparse.ArgumentParser) -> None:
    """Options that say what the circuit and the meter are."""
    parser.add_argument("--setup", metavar="FILE", type=Path, help="the site's setup (TOML)")
    parser.add_argument(
        "--nominal",
        metavar="HZ",
        type=positive,
        help="mains frequency, 50 or 60; found out when not given",
    )
    parser.add_argument(
        "--limit",
        metavar="PERCENT",
        type=positive,
        help="an averaging meter misleads beyond this error (default 2)",
    )


def add_recording(parser: argparse.ArgumentParser) -> None:
    """Options that say what a file may not say itself."""
    parser.add_argument(
        "--rate", metavar="HZ", type=positive, help="sets a second, when the source does not tell"
    )
    parser.add_argument(
        "--scale",
        metavar="CHANNEL=UNITS",
        type=scale,
        action="append",
        default=[],
        help="units at full scale of a WAV or FLAC channel, such as ch1=400V",
    )
    parser.add_argument(
        "--format",
        metavar="FORMAT",
        help="crestwire, text, or raw:TYPE:CHANNELS:ORDER such as raw:u16:2:little, "
        "when it is not to be found out",
    )


def positive(text: str) -> float:
    """A finite number above 0."""
    try:
        value = float(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"{text!r} is not a number") from None
    if not (math.isfinite(value) and value > 0.0):
        raise argparse.ArgumentTypeError(f"{text} is not a number above 0")
    return value


def seconds(text: str) -> float:
    """A length of time: 10, 10s, 500ms, 5min, 8h. [s]"""
    found = re.fullmatch(r"\s*([0-9]*\.?[0-9]+)\s*([a-z]*)\s*", text)
    if found is None or found[2] not in _UNITS or float(found[1]) <= 0.0:
        raise argparse.ArgumentTypeError(
            f"{text!r} is not a length of time such as 10s, 500ms, 5min or 8h"
        )
    return float(found[1]) * _UNITS[found[2]]


def scale(text: str) -> tuple[str, tuple[float, str]]:
    """CHANNEL=UNITS_AT_FULL_SCALE, with or without a unit: (channel, (number, unit))."""
    name, equals, value = text.partition("=")
    found = re.fullmatch(r"\s*([0-9.eE+-]+)\s*([kmM]?[VA])?\s*", value)
    try:
        number = float(found[1]) if found is not None else math.nan
    except ValueError:
        number = math.nan
    if found is None or not (equals and name.strip() and math.isfinite(number) and number != 0.0):
        raise argparse.ArgumentTypeError(
            f"{text!r} does not read as CHANNEL=UNITS, such as ch1=400V"
        )
    return name.strip(), (number, found[2] or "")
