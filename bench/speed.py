"""How fast: whole commands against real time, and a live window.

Ten minutes of two channels at 8 kS/s are measured by the command, start-up included.
"""

import statistics
import subprocess
import sys
import time
from pathlib import Path

from bench.figure import Figure, at_least, at_most, median_seconds, report
from bench.recordings import RATE, folder, two_channels, write
from dsp.measure import measure
from dsp.meters import BUILT_IN, show
from dsp.verdict import Judge
from dsp.waveform import Channel, Kind, Waveform
from dsp.windowing import Windower
from shift.live import GATHER

MINUTES = 10.0
CHANNELS = [
    Channel("U", "V", Kind.VOLTAGE, step=0.2),
    Channel("I", "A", Kind.CURRENT, step=0.01),
]


def run() -> bool:
    """Print the figures."""
    figures = [*_recordings(), _live()]
    return report("Speed", figures)


def _recordings() -> list[Figure]:
    command = str(Path(sys.executable).with_name("crestwatch"))
    samples = two_channels(60.0 * MINUTES)
    figures = []
    with folder() as where:
        for kind, extra in (
            ("npz", []),
            ("wav", ["--scale", "ch1=400V", "--scale", "ch2=20A"]),
            ("csv", []),
        ):
            path = where / f"ten.{kind}"
            write(path, samples)
            seconds = median_seconds(
                lambda path=path, extra=extra: subprocess.run(
                    [command, "measure", str(path), *extra], capture_output=True, check=True
                ),
                3,
            )
            figures.append(
                at_least(
                    f"measure, 10 min of 2 channels at 8 kS/s from {kind}, start-up included",
                    60.0 * MINUTES / seconds,
                    "times real time",
                    400.0,
                    f"{seconds:.2f} s",
                )
            )
    return figures


def _live() -> Figure:
    """One window at a time, as it comes live: 0.2 s of two channels."""
    samples = two_channels(30.0)
    windower = Windower(2, 0, 50.0)
    judges = [Judge(0.02) for _ in BUILT_IN]
    times = []
    spent = 0.0
    gathered = round(GATHER * RATE)
    for at in range(0, samples.shape[1], gathered):
        began = time.perf_counter()
        runs = windower.feed(Waveform(samples[:, at : at + gathered], RATE, at))
        for windows in runs:
            readings = measure(windows, CHANNELS, 50.0)
            for card, judge in zip(BUILT_IN, judges, strict=True):
                _, error, u = show(card, windows, readings, CHANNELS)
                judge.judge(error, u, readings.rms > 0.0)
        spent += time.perf_counter() - began
        if runs:
            times.append(spent)
            spent = 0.0
    return at_most(
        "live window, feeding included, median", 1e3 * statistics.median(times), "ms", 3.0
    )
