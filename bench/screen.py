"""What the screen costs: a moving picture of four channels on a real pty, nothing measured behind.

Every look is a new Snapshot in which every figure, trace and trend differs: more than a watch
gives, whose windows come five times a second. `python -m bench.screen` prints the figures.
"""

import fcntl
import math
import os
import pty
import select
import signal
import statistics
import struct
import sys
import termios
import time
from dataclasses import replace

from bench.figure import Figure, at_most, report

SIZES = ((80, 24, 5.0), (120, 40, 7.0), (200, 60, 12.0))  # columns, rows, percent of a core
WATCHED = 8.0  # s of each page
KEYS = 60
FIRST = b"would show"  # of "averaging meter would show"


def run() -> bool:
    """Print the figures."""
    figures: list[Figure] = []
    for width, height, goal in SIZES:
        size = f"{width}x{height}"
        page = _Screen(width, height)
        try:
            figures.append(at_most(f"{size} first paint", 1e3 * page.until(FIRST), "ms", 600.0))
            page.drain(1.0)
            figures.append(at_most(f"{size} Now, of a core", page.load(), "%", goal))
            page.send(b"2")
            page.drain(0.5)
            figures.append(at_most(f"{size} Wave, of a core", page.load(), "%", goal))
            waits = page.answers()
            figures.append(at_most(f"{size} key to bytes, median", waits[0], "ms", 6.0))
            figures.append(at_most(f"{size} key to bytes, 99 %", waits[1], "ms", 30.0))
            figures.append(at_most(f"{size} memory", page.memory(), "MB", 110.0))
            page.send(b"q")
            page.drain(1.5)
        finally:
            page.close()
    return report("screen", figures)


class _Screen:
    """The app in a child process on a pty of its own."""

    def __init__(self, width: int, height: int) -> None:
        self._began = time.perf_counter()
        self._pid, self._master = pty.fork()
        if self._pid == 0:
            environment = {**os.environ, "TERM": "xterm-256color", "LANG": "C.UTF-8"}
            environment.pop("NO_COLOR", None)
            environment["COLORTERM"] = "truecolor"
            os.execve(sys.executable, [sys.executable, "-m", "bench.screen", "show"], environment)
        fcntl.ioctl(self._master, termios.TIOCSWINSZ, struct.pack("HHHH", height, width, 0, 0))

    def _read(self, wait: float) -> bytes:
        ready, _, _ = select.select([self._master], [], [], wait)
        try:
            return os.read(self._master, 1 << 16) if ready else b""
        except OSError:  # the child has gone
            return b""

    def until(self, wanted: bytes, patience: float = 20.0) -> float:
        """Seconds from the start of the child until its bytes hold `wanted`."""
        seen = b""
        while wanted not in seen:
            seen = seen[-4096:] + self._read(0.5)
            if time.perf_counter() - self._began > patience:
                raise TimeoutError(f"{wanted!r} did not appear")
        return time.perf_counter() - self._began

    def drain(self, seconds: float) -> int:
        """Read for a while; how many bytes came."""
        end, count = time.perf_counter() + seconds, 0
        while (left := end - time.perf_counter()) > 0:
            count += len(self._read(left))
        return count

    def send(self, keys: bytes) -> None:
        os.write(self._master, keys)

    def load(self) -> float:
        """Percent of a core over a while."""
        before, began = self._cpu(), time.perf_counter()
        self.drain(WATCHED)
        return 100.0 * (self._cpu() - before) / (time.perf_counter() - began)

    def answers(self) -> tuple[float, float]:
        """Median and 99 % of the time from a key to the first bytes after it. [ms]

        The picture is frozen first, so that nothing but the key makes bytes.
        """
        self.send(b" ")
        self.drain(0.5)
        waits = []
        for _ in range(KEYS):
            began = time.perf_counter()
            self.send(b"\x1b[C")
            self._read(2.0)
            waits.append(1e3 * (time.perf_counter() - began))
            self.drain(0.05)
        self.send(b" ")
        return statistics.median(waits), sorted(waits)[math.ceil(0.99 * len(waits)) - 1]

    def _cpu(self) -> float:
        with open(f"/proc/{self._pid}/stat") as stat:  # noqa: PTH123
            fields = stat.read().rsplit(")", 1)[1].split()
        return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")

    def memory(self) -> float:
        """Resident memory. [MB]"""
        with open(f"/proc/{self._pid}/statm") as statm:  # noqa: PTH123
            return int(statm.read().split()[1]) * os.sysconf("SC_PAGE_SIZE") / 1e6

    def close(self) -> None:
        done, _ = os.waitpid(self._pid, os.WNOHANG)
        if not done:
            os.kill(self._pid, signal.SIGTERM)
            os.waitpid(self._pid, 0)
        os.close(self._master)


def _show() -> None:
    """The child: the app over a picture that moves."""
    from tui.app import CrestwatchApp
    from tui.settings import Settings

    states = _states(40)
    at = [0]

    def poll():
        at[0] += 1
        return replace(states[at[0] % len(states)], number=at[0])

    CrestwatchApp(poll, settings=Settings()).run()


def _states(count: int) -> list:
    """Snapshots of a phase-cut circuit whose angle moves; closed forms, not measured."""
    import numpy as np

    from acquisition.accounting import Tally
    from acquisition.status import LinkState, ReaderStatus
    from acquisition.stream import ChannelHint, StreamInfo
    from dsp.reading import Reading
    from dsp.verdict import Judgement, Verdict
    from dsp.waveform import Channel, Kind
    from dsp.window import Flag, Lock, Window
    from shift.snapshot import ChannelView, Snapshot, Stage, Trend

    names = ("supply", "way 7 V", "way 7 A", "neutral")
    units = ("V", "V", "A", "A")
    rng = np.random.default_rng(5)
    orders = np.arange(1, 51)
    phase = 2.0 * np.pi * (np.arange(1610) - 5.0) / 160.0
    states = []
    for k in range(count):
        samples, views = [], []
        for c, (name, unit) in enumerate(zip(names, units, strict=True)):
            alpha = 1.0 + 0.8 * math.sin(0.3 * k + c) if c else 0.0
            top = 325.0 if unit == "V" else 12.0
            wave = np.where(np.mod(phase, np.pi) >= alpha, top * np.sin(phase), 0.0)
            wave += 0.002 * top * rng.standard_normal(len(wave))
            rms = float(np.sqrt(np.mean(wave[5:1605] ** 2)))
            error = -0.3 * alpha / 1.8
            reading = Reading(
                start=0.2 * k, duration=0.2, cycles=10, frequency=50.0 + 0.01 * math.sin(k),
                lock=Lock.LOCKED, rms=rms, mean=0.001 * k, arv=0.8 * rms, peak_max=top,
                peak_min=-top, crest_factor=top / rms, form_factor=1.2, fundamental=0.9 * rms,
                thd_f=0.3 + 0.001 * k,
                harmonics=0.9 * rms / orders * np.exp(1j * (orders + 0.1 * k)),
                averaging=rms * (1.0 + error), averaging_error=error, firing_angle=alpha,
                u={"rms": 1e-4 * rms, "averaging": 1e-4 * rms, "averaging_error": 1e-3},
                flags=Flag.NONE,
            )  # fmt: skip
            judgement = Judgement.MISLEADS if c else Judgement.AGREES
            seconds = np.arange(1500) * 0.2 + 0.2 * k
            trend = rms * (1.0 + 0.2 * np.sin(0.02 * seconds + c))
            samples.append(wave)
            views.append(
                ChannelView(
                    Channel(name, unit, Kind.VOLTAGE if unit == "V" else Kind.CURRENT),
                    reading,
                    (Verdict("averaging", reading.averaging, error, 1e-3, judgement),),
                    Trend(seconds, trend),
                )
            )
        window = Window(
            np.array(samples), 0, 5.0, 1605.0, 8000.0, 10, 50.0, 1e-4, Lock.LOCKED, Flag.NONE
        )
        info = StreamInfo("crestwire", tuple(ChannelHint(name) for name in names), 8000.0)
        stream = ReaderStatus(LinkState.LIVE, "bench", info, Tally(1600 * k, 0))
        states.append(
            Snapshot(
                "bench", Stage.MEASURING, "Measuring.", stream, tuple(views), window,
                seconds=300.0 + 0.2 * k, windows=k,
            )
        )  # fmt: skip
    return states


if __name__ == "__main__":
    if sys.argv[1:] == ["show"]:
        _show()
    else:
        sys.exit(0 if run() else 1)
