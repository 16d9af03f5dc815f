"""Print a completion script for your shell."""

import argparse
import sys

from crestwatch import diagnostics

EXAMPLES = """\
examples:
  crestwatch completion bash > ~/.local/share/bash-completion/completions/crestwatch
  crestwatch completion zsh > ~/.zfunc/_crestwatch"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Arguments of `completion`."""
    parser.add_argument("shell", choices=("bash", "zsh", "tcsh"))


def run(options: argparse.Namespace) -> int:
    """Write the script to stdout."""
    import shtab

    from crestwatch.cli import build_parser

    sys.stdout.write(shtab.complete(build_parser(only="*"), shell=options.shell) + "\n")
    return diagnostics.DONE
