"""How fast: whole commands against real time, the arithmetic against plain numpy, live windows.

Real time is the yardstick for recordings (10 minutes of two channels at 8 kS/s); for the basic
chain it is numpy itself, in the same run: five passes over the data (two products, an absolute
value, two sums), and a loop that measures window by window.
"""

import statistics
import subprocess
import sys
import time
from pathlib import Path

import numpy as np

from bench.figure import Figure, at_least, at_most, median_seconds, report
from bench.recordings import RATE, folder, two_channels, write
from dsp.measure import measure
from dsp.meters import BUILT_IN, show
from dsp.verdict import Judge
from dsp.waveform import Channel, Kind, Waveform
from dsp.windowing import Windower

MINUTES = 10.0
CHANNELS = [
    Channel("U", "V", Kind.VOLTAGE, step=0.2),
    Channel("I", "A", Kind.CURRENT, step=0.01),
]


def run() -> bool:
    """Print the figures."""
    figures = [*_recordings(), *_arithmetic(), _live()]
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


def _arithmetic() -> list[Figure]:
    samples = two_channels(60.0)

    def chain() -> None:
        windower = Windower(2, 0, 50.0)
        judges = [Judge(0.02) for _ in BUILT_IN]
        for at in range(0, samples.shape[1], 1 << 16):
            for windows in windower.feed(Waveform(samples[:, at : at + (1 << 16)], RATE, at)):
                readings = measure(windows, CHANNELS, 50.0)
                for card, judge in zip(BUILT_IN[:1], judges, strict=False):
                    _, error, u = show(card, windows, readings, CHANNELS)
                    judge.judge(error, u, readings.rms > 0.0)

    def roofline() -> None:
        for row in samples:
            float((row * row).sum())
            float(np.abs(row).sum())
            row * row

    def loop() -> None:
        n = np.arange(RATE // 5)
        matrix = np.exp(-2j * np.pi * np.outer(np.arange(1, 51), n) / (RATE / 50.0))
        for row in samples:
            for at in range(0, len(row) - len(n), len(n)):
                x = row[at : at + len(n)]
                np.sqrt(np.mean(x * x)), np.mean(np.abs(x - x.mean())), x.max(), x.min()
                cycles = x.reshape(10, -1)
                np.sqrt(np.mean(cycles**2, axis=1)), np.mean(np.abs(cycles), axis=1)
                np.abs(matrix @ x)

    ours, passes, plain = (median_seconds(work, 5) for work in (chain, roofline, loop))
    return [
        at_least(
            "whole chain (RMS to verdict, 50 harmonics) over five numpy passes",
            passes / ours,
            "of their speed",
            0.0,
            f"{samples.size / ours / 1e6:.1f} million samples a second; told, no goal here",
        ),
        at_least("whole chain over a per-window numpy loop", plain / ours, "times", 1.0),
    ]


def _live() -> Figure:
    """One window at a time, as it comes live: 0.2 s of two channels."""
    samples = two_channels(30.0)
    windower = Windower(2, 0, 50.0)
    judges = [Judge(0.02) for _ in BUILT_IN]
    times = []
    spent = 0.0
    for at in range(0, samples.shape[1], 128):
        began = time.perf_counter()
        runs = windower.feed(Waveform(samples[:, at : at + 128], RATE, at))
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
