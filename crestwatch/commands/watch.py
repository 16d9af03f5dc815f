"""Watch a source: the live screen, or a line per window when stdout is no terminal.

Measures what comes, flags when an averaging meter would mislead, and counts every sample that
was lost. Leave with q, or Ctrl+C in the plain forms.
"""

import argparse
import sys
import time
from contextlib import closing
from typing import TYPE_CHECKING

from crestwatch import arguments, diagnostics
from crestwatch.source import GRAMMAR, parse_source

if TYPE_CHECKING:
    from crestwatch.compose.watching import Watch

EXAMPLES = f"""\
{GRAMMAR}

examples:
  crestwatch watch sim:hall
  crestwatch watch /dev/ttyACM0 --setup panel.toml
  crestwatch watch tcp://127.0.0.1:5000 --json-lines --for 1min > minute.jsonl
  crestwatch watch evening.wav --scale ch1=400V --speed 10"""

WAIT_UNTOLD = 1.0  # s of waiting before it is said what for
STREAM_EVERY = 10.0  # s between accounts of the stream


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Arguments of `watch`."""
    parser.add_argument("source", metavar="SOURCE", help="what to watch; see below")
    form = parser.add_mutually_exclusive_group()
    form.add_argument("--plain", action="store_true", help="a line per channel per window")
    form.add_argument("--json-lines", action="store_true", help="a record a line")
    parser.add_argument(
        "--for",
        dest="length",
        metavar="TIME",
        type=arguments.seconds,
        help="stop after this long: 10s, 5min, 8h",
    )
    parser.add_argument(
        "--speed",
        metavar="TIMES",
        type=arguments.positive,
        default=1.0,
        help="replay a recording or a simulated logger faster (10) or slower (0.5)",
    )
    parser.add_argument("--baud", metavar="RATE", type=int, help="of a serial device")
    arguments.add_setup(parser)
    arguments.add_recording(parser)
    parser.add_argument(
        "--theme", choices=("dark", "light", "contrast", "mono"), help="colours of the screen"
    )
    parser.add_argument(
        "--glyphs",
        choices=("auto", "braille", "block", "half", "ascii"),
        default="auto",
        help="what traces are drawn with",
    )


def run(options: argparse.Namespace) -> int:
    """Watch until told to stop or the source ends."""
    from crestwatch.compose import watching
    from crestwatch.compose.sources import setup_for

    source = parse_source(options.source)
    setup = setup_for(options.setup, options.nominal, options.limit)
    watch = watching.open_watch(
        source,
        options.source,
        setup,
        setup_name=options.setup.name if options.setup is not None else "",
        rate=options.rate,
        scale=dict(options.scale),
        format_=options.format,
        speed=options.speed,
        baud=options.baud,
    )
    with closing(watch):
        if options.plain or options.json_lines or not sys.stdout.isatty():
            return _print(watch, options)
        watching.show_screen(watch, options.theme, options.glyphs, options.length)
        return watch.outcome()


def _print(watch: "Watch", options: argparse.Namespace) -> int:
    from crestwatch.output import JsonLinesOutput, Output, PlainOutput
    from shift.wording import CAUTION_TITLE, CAUTIONS

    diagnostics.note(f"{CAUTION_TITLE}:")
    for caution in CAUTIONS:
        sys.stderr.write(f"  {caution}\n")
    output: Output = JsonLinesOutput(sys.stdout) if options.json_lines else PlainOutput(sys.stdout)
    live = watch.live
    began = time.monotonic()
    told = began
    introduced = False
    remarked = waiting = ""

    def over() -> bool:
        nonlocal told, remarked, waiting
        now = time.monotonic()
        if introduced and now - told >= STREAM_EVERY:
            told = now
            output.stream(watch.status(), live.snapshot.seconds)
        problem = live.snapshot.stream.problem
        if problem and problem != remarked:
            diagnostics.note(problem)
        remarked = problem
        words = live.snapshot.words
        if not introduced and words != waiting and now - began > WAIT_UNTOLD:
            diagnostics.note(words)
            waiting = words
        if options.length is None:
            return False
        return bool(now - began >= options.length or live.snapshot.seconds >= options.length)

    try:
        for batch in live.batches(over):
            if not introduced:
                output.begin(watch.described(options.source))
                for sentence in live.snapshot.advice:
                    diagnostics.note(sentence)
                introduced = True
            output.batch(batch)
    finally:
        # Interrupted or not, what was measured is summed up.
        if introduced:
            output.end(live.summaries, watch.status(), live.snapshot.seconds)
    return watch.outcome()
