"""Simulate a logger that other programs can connect to, over a pseudo-terminal or TCP.

Prints where to connect, then streams in real time until interrupted. The same scenes serve
`watch sim:SCENE`.
"""

import argparse
import sys

from crestwatch import arguments, diagnostics

EXAMPLES = """\
examples:
  crestwatch simulate hall --on pty
  crestwatch simulate workshop --on tcp:5000
  crestwatch simulate clean --on pty --wire text --bits 10
  crestwatch simulate hall --on pty --faults drop=1e-4,reboot=30s
  crestwatch simulate --list"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Arguments of `simulate`."""
    parser.add_argument("scene", metavar="SCENE", nargs="?", help="which circuit; see --list")
    parser.add_argument("--list", action="store_true", help="the scenes and what happens in them")
    parser.add_argument(
        "--on", metavar="pty|tcp:PORT", default="pty", help="where to serve (default pty)"
    )
    parser.add_argument(
        "--wire",
        choices=("crestwire", "text", "raw"),
        default="crestwire",
        help="wire format (default crestwire)",
    )
    parser.add_argument("--rate", metavar="HZ", type=arguments.positive, help="sets a second")
    parser.add_argument("--bits", type=int, choices=range(8, 17), default=12, metavar="8…16")
    parser.add_argument("--noise", metavar="CODES", type=float, default=0.5, help="RMS noise")
    parser.add_argument("--ppm", type=float, default=0.0, help="clock error, parts per million")
    parser.add_argument("--drift", type=float, default=0.0, help="slow swing of the clock, ppm")
    parser.add_argument("--faults", metavar="LIST", default="", help="such as drop=1e-4,reboot=30s")
    parser.add_argument("--seed", type=int, default=1, help="another seed, other noise and faults")
    parser.add_argument("--speed", metavar="TIMES", type=arguments.positive, default=1.0)
    parser.add_argument(
        "--for", dest="length", metavar="TIME", type=arguments.seconds, help="stop after this long"
    )


def run(options: argparse.Namespace) -> int:
    """Serve until interrupted."""
    from crestwatch.compose.serving import serve
    from crestwatch.compose.sources import logger_spec, scene_list

    if options.list:
        for name, title, description in scene_list():
            sys.stdout.write(f"{name:<10} {title}\n           {description}\n")
        return diagnostics.DONE
    if options.scene is None:
        error = diagnostics.UsageError("name a SCENE to simulate")
        error.add_note("`crestwatch simulate --list` tells which there are")
        raise error
    spec = logger_spec(
        options.scene,
        wire=options.wire,
        rate=options.rate,
        bits=options.bits,
        noise=options.noise,
        ppm=options.ppm,
        drift=options.drift,
        seed=options.seed,
        faults=options.faults,
    )

    def announce(address: str) -> None:
        sys.stdout.write(address + "\n")
        sys.stdout.flush()
        diagnostics.note(f"connect with: crestwatch watch {address}   (Ctrl+C stops)")

    sent = serve(spec, options.on, options.speed, options.length, announce)
    diagnostics.note(sent)
    return diagnostics.DONE
