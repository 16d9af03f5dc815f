"""How soon: --help against bare Python, and the first paint of the screen in a real pty."""

import os
import pty
import select
import statistics
import subprocess
import sys
import time
from pathlib import Path

from bench.figure import at_most, median_seconds, report

COMMAND = str(Path(sys.executable).with_name("crestwatch"))


def run() -> bool:
    """Print the figures."""
    bare = median_seconds(lambda: subprocess.run([sys.executable, "-c", "pass"], check=True), 9)
    asked = median_seconds(
        lambda: subprocess.run([COMMAND, "--help"], capture_output=True, check=True), 9
    )
    paints = [first_paint() for _ in range(5)]
    return report(
        "Start",
        [
            at_most("--help over bare Python", 1e3 * (asked - bare), "ms", 60.0),
            at_most(
                "first useful paint of the screen", 1e3 * statistics.median(paints), "ms", 600.0
            ),
        ],
    )


def first_paint() -> float:
    """Seconds from the command to the first words on a pseudo-terminal of 80 by 24."""
    began = time.perf_counter()
    pid, master = pty.fork()
    if pid == 0:
        os.environ.update(TERM="xterm-256color", COLUMNS="80", LINES="24")
        os.execv(COMMAND, [COMMAND, "watch", "sim:hall"])
    seen = b""
    try:
        while time.perf_counter() - began < 20.0:
            if select.select([master], [], [], 0.05)[0]:
                seen += os.read(master, 65536)
                if b"proof of dead" in seen:
                    return time.perf_counter() - began
        raise RuntimeError("nothing was painted in 20 s")
    finally:
        os.write(master, b"q")
        deadline = time.perf_counter() + 5.0
        while time.perf_counter() < deadline and os.waitpid(pid, os.WNOHANG)[0] == 0:
            if select.select([master], [], [], 0.05)[0]:
                try:
                    os.read(master, 65536)
                except OSError:
                    break
        os.close(master)
