"""List the serial devices found, with identity and what to do if one is not readable."""

import argparse
import json
import sys

from crestwatch import diagnostics

EXAMPLES = """\
examples:
  crestwatch ports
  crestwatch ports --json"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Arguments of `ports`."""
    parser.add_argument("--json", action="store_true", help="one object, for scripts")


def run(options: argparse.Namespace) -> int:
    """Print the list; an empty one is an answer too."""
    from crestwatch.compose import finding

    found = finding.ports()
    if options.json:
        sys.stdout.write(json.dumps({"ports": found}, ensure_ascii=False) + "\n")
        return diagnostics.DONE
    if not found:
        sys.stdout.write("No serial device is plugged in.\n")
        diagnostics.note(
            "plug the logger in and look again; `crestwatch watch sim:hall` needs no logger"
        )
        return diagnostics.DONE
    for port in found:
        sys.stdout.write(f"{port['device']}  {port['description']}\n")
        for label in ("identity", "path", "problem", "advice"):
            if port.get(label):
                sys.stdout.write(f"    {label}: {port[label]}\n")
    return diagnostics.DONE
