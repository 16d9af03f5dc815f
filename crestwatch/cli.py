"""The command line: picks a command, imports it only then, and turns errors into exit codes."""

import argparse
import importlib
import io
import os
import sys
from collections.abc import Sequence
from typing import NoReturn

from crestwatch import diagnostics

# name -> what it does, for the overview; each is a module of crestwatch.commands.
COMMANDS = {
    "watch": "the live screen on a logger, a simulated one or a replayed recording",
    "measure": "the same numbers from a recording, offline",
    "ports": "serial devices found, and what to do if one is not readable",
    "identify": "what format a stream is in, how sure, and the setup lines for it",
    "simulate": "a simulated logger that other programs can connect to",
    "completion": "a completion script for your shell",
}

DESCRIPTION = """\
True RMS, peak, crest factor and THD of an AC circuit from a homemade logger, and when an
averaging meter's reading would mislead: by how much, and how sure that is."""

EXAMPLES = """\
examples:
  crestwatch watch sim:hall                 look around, no hardware needed
  crestwatch watch /dev/ttyACM0             a logger on USB
  crestwatch measure evening.wav --scale ch1=400V --scale ch2=50A
  crestwatch simulate workshop --on pty     a logger to connect to, in another terminal
  crestwatch COMMAND --help                 all there is to say of one command

A reading is no proof of dead. Local codes and licensed practice come first."""


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command that the arguments name.

    Returns:
        0 done; 1 a check failed; 2 wrong usage; 3 source not available; 4 data unreadable;
        5 could not write; 130 interrupted.
    """
    # Products here are small: more threads only spin, for twice the CPU and not a moment sooner.
    # numpy's libraries read this when they load, and a person's own choice stands.
    for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    for stream in (sys.stdout, sys.stderr):
        # A terminal that knows no "…" or "°" gets a question mark, never an exception.
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")
    arguments = list(sys.argv[1:] if argv is None else argv)
    parser = build_parser(only=_named(arguments))
    options = parser.parse_args(arguments)
    if not getattr(options, "command", None):
        parser.print_help()
        return diagnostics.DONE
    command = importlib.import_module(f"crestwatch.commands.{options.command}")
    try:
        code: int = command.run(options)
        sys.stdout.flush()
    except BrokenPipeError:
        # The reader of a pipe has gone; there is nobody left to tell. Nothing more may be
        # flushed at exit either.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return diagnostics.DONE
    except (Exception, KeyboardInterrupt) as error:
        return diagnostics.explain(error)
    return code


def build_parser(only: str | None = None) -> argparse.ArgumentParser:
    """The parser; the arguments of command `only`, of every command when it is "*"."""
    parser = _Parser(
        prog="crestwatch",
        description=DESCRIPTION,
        epilog=EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action=_Version, help="print the version and leave")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", title="commands")
    for name, summary in COMMANDS.items():
        if only not in (name, "*"):
            commands.add_parser(name, help=summary, add_help=False)
            continue
        module = importlib.import_module(f"crestwatch.commands.{name}")
        command = commands.add_parser(
            name,
            help=summary,
            description=module.__doc__,
            epilog=getattr(module, "EXAMPLES", None),
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        module.add_arguments(command)
    return parser


class _Parser(argparse.ArgumentParser):
    """Says what is wrong the way every other message does."""

    def error(self, message: str) -> NoReturn:
        """One sentence, what to try, exit code 2."""
        diagnostics.say(message, (f"`{self.prog} --help` shows what there is",))
        self.exit(diagnostics.WRONG_USAGE)


class _Version(argparse.Action):
    """Looks the version up only when asked: importlib.metadata costs more than the parser."""

    def __init__(self, option_strings: Sequence[str], dest: str, help: str | None = None) -> None:  # noqa: A002
        super().__init__(option_strings, dest, nargs=0, help=help)

    def __call__(
        self,
        parser: argparse.ArgumentParser,
        namespace: argparse.Namespace,
        values: object,
        option_string: str | None = None,
    ) -> None:
        from importlib.metadata import version

        sys.stdout.write(f"crestwatch {version('crestwatch')}\n")
        parser.exit()


def _named(arguments: Sequence[str]) -> str | None:
    for argument in arguments:
        if argument in COMMANDS:
            return argument
        if not argument.startswith("-"):
            return None
    return None
