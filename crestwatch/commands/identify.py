"""Find out what format a stream is in, how sure that is, and the setup lines to use it."""

import argparse
import json
import sys

from crestwatch import arguments, diagnostics
from crestwatch.source import GRAMMAR, FileSource, parse_source

EXAMPLES = f"""\
{GRAMMAR}

examples:
  crestwatch identify /dev/ttyACM0
  crestwatch identify capture.bin --json
  crestwatch identify serial:/dev/ttyUSB0?baud=115200 --for 2s"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Arguments of `identify`."""
    parser.add_argument("source", metavar="SOURCE", help="what to listen to; see below")
    parser.add_argument("--json", action="store_true", help="one object, for scripts")
    parser.add_argument(
        "--for",
        dest="length",
        metavar="TIME",
        type=arguments.seconds,
        default=3.0,
        help="listen this long (default 3s)",
    )
    parser.add_argument("--baud", metavar="RATE", type=int, help="of a serial device")


def run(options: argparse.Namespace) -> int:
    """Listen, decide, print."""
    from crestwatch.compose import finding

    source = parse_source(options.source)
    if sys.stderr.isatty() and not isinstance(source, FileSource):
        diagnostics.note(f"listening to {options.source} for up to {options.length:g} s")
    found = finding.identify(source, options.length, options.baud)
    if options.json:
        sys.stdout.write(json.dumps(found, ensure_ascii=False, allow_nan=False) + "\n")
    else:
        _print(found)
    if found["format"] is None:
        diagnostics.say(
            f"{options.source} gives no stream of samples that this program knows",
            (
                "check the baud rate, and that the logger prints samples and nothing else",
                "docs/crestwire.md describes the framed format",
            ),
        )
        return diagnostics.DATA_UNREADABLE
    return diagnostics.DONE


def _print(found: "dict[str, object]") -> None:
    out = sys.stdout
    if found["format"] is not None:
        rate = found["rate_hz"]
        told = f", {rate:.6g} sets/s" if isinstance(rate, float) else ""
        order = f", {found['byte_order']}-endian" if found["byte_order"] else ""
        out.write(
            f"{found['format']}: {found['channels']} channels of {found['type']}{order}{told}\n"
        )
        out.write(f"sure to {found['confidence']:.0%}\n")
    for label in ("reasons", "ambiguous"):
        lines = found[label]
        assert isinstance(lines, list)
        for line in lines:
            out.write(f"  {'because' if label == 'reasons' else 'but'}: {line}\n")
    if found["setup"]:
        out.write(f"\nsetup lines:\n\n{found['setup']}\n")
