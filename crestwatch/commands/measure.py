"""Measure a recording offline: the same numbers as the live screen, from a file.

Prints a table of every channel; `--csv` and `--json-lines` give one row or record per channel
per window. A damaged file is measured as far as it is good.
"""

import argparse
import sys
from contextlib import closing
from pathlib import Path

from crestwatch import arguments, diagnostics

EXAMPLES = """\
examples:
  crestwatch measure evening.csv
  crestwatch measure evening.wav --scale ch1=400V --scale ch2=50A
  crestwatch measure fault.cfg --json-lines | head
  crestwatch measure capture.bin --setup panel.toml --csv > panel.csv"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Arguments of `measure`."""
    parser.add_argument(
        "recording",
        metavar="RECORDING",
        type=Path,
        help="CSV, WAV, FLAC, NPZ, NPY, COMTRADE .cfg, or a logger's captured bytes",
    )
    form = parser.add_mutually_exclusive_group()
    form.add_argument("--csv", action="store_true", help="a row per channel per window")
    form.add_argument("--json-lines", action="store_true", help="a record a line")
    form.add_argument("--windows", action="store_true", help="a plain line per channel per window")
    arguments.add_setup(parser)
    arguments.add_recording(parser)


def run(options: argparse.Namespace) -> int:
    """Measure and print."""
    from crestwatch.compose.measuring import open_measuring
    from crestwatch.compose.sources import setup_for
    from crestwatch.output import CsvOutput, JsonLinesOutput, PlainOutput, TableOutput
    from crestwatch.progress import Progress

    setup = setup_for(options.setup, options.nominal, options.limit)
    measuring = open_measuring(
        options.recording, setup, options.rate, dict(options.scale), options.format
    )
    out = sys.stdout
    output = (
        CsvOutput(out)
        if options.csv
        else JsonLinesOutput(out)
        if options.json_lines
        else PlainOutput(out)
        if options.windows
        else TableOutput(out)
    )
    for sentence in measuring.notes:
        diagnostics.note(sentence)
    # Rows that scroll past on the same terminal are progress enough.
    bar = isinstance(output, TableOutput) or not sys.stdout.isatty()
    with closing(measuring):
        output.begin(measuring.described(str(options.recording)))
        with closing(Progress("measuring", measuring.bytes_total, bar)) as progress:
            for batch in measuring.batches():
                output.batch(batch)
                progress.advance_to(measuring.bytes_read())
        output.end(measuring.summaries, measuring.status(), measuring.engine.seconds)
    if measuring.damage is not None:
        # What was measured stands above; the exit code tells a script that it is not all.
        return diagnostics.explain(measuring.damage)
    if not any(summary.windows for summary in measuring.summaries):
        diagnostics.say(
            f"{options.recording} holds no sample that could be measured",
            ("check that the file is the one you mean",),
        )
        return diagnostics.DATA_UNREADABLE
    return diagnostics.DONE
