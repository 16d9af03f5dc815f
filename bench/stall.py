"""A terminal that stops reading for 8 s: nothing is lost, and the watch goes on.

The real command runs on a pseudo-terminal that is not read for 8 s; the simulated logger serves on
another and says at the end what it sent. The screen's own count of lost sets is read afterwards.
"""

import os
import pty
import re
import select
import signal
import subprocess
import sys
import time
from pathlib import Path

from bench.figure import at_least, at_most, report

COMMAND = str(Path(sys.executable).with_name("crestwatch"))
STALL = 8.0  # s


def run() -> bool:
    """Print the figures."""
    logger = subprocess.Popen(
        [COMMAND, "simulate", "hall", "--on", "pty"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    assert logger.stdout is not None
    port = logger.stdout.readline().strip()
    pid, master = pty.fork()
    if pid == 0:
        os.environ.update(TERM="xterm-256color", COLUMNS="80", LINES="24")
        os.execv(COMMAND, [COMMAND, "watch", port])
    try:
        _read(master, 3.0)
        os.write(master, b"\r")
        _read(master, 2.0)
        time.sleep(STALL)  # the terminal reads nothing
        shown = _read(master, 4.0)
        found = re.findall(rb"(\d+) lost", shown)
        measured = re.findall(rb"([0-9.]+) s\x1b", shown)
        lost = int(found[-1]) if found else -1
        seconds = float(measured[-1]) if measured else 0.0
        os.write(master, b"q")
        _read(master, 1.0)
    finally:
        os.close(master)
        os.waitpid(pid, 0)
        logger.send_signal(signal.SIGINT)
        logger.communicate(timeout=10)
    return report(
        "A terminal stalled for 8 s",
        [
            at_most("sets lost", float(lost), "sets", 0.0, "as the screen counts them"),
            at_least("measured time shown afterwards", seconds, "s", STALL + 4.0),
        ],
    )


def _read(master: int, seconds: float) -> bytes:
    out = b""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if select.select([master], [], [], 0.1)[0]:
            try:
                out += os.read(master, 65536)
            except OSError:
                break
    return out
