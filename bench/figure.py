"""One figure of the bench: what was measured, the goal, and whether it was reached.

Times are given as ratios within one run, so that a slow or busy machine moves both sides.
"""

import statistics
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Figure:
    """A line of the bench's report."""

    name: str
    value: float
    unit: str
    goal: float
    at_most: bool  # True: the goal is an upper bound
    remark: str = ""

    @property
    def reached(self) -> bool:
        """Whether the goal is met."""
        return self.value <= self.goal if self.at_most else self.value >= self.goal

    def line(self) -> str:
        """The line as printed."""
        sign = "≤" if self.at_most else "≥"
        mark = "ok  " if self.reached else "MISS"
        remark = f"  ({self.remark})" if self.remark else ""
        return (
            f"{mark} {self.name}: {self.value:.4g} {self.unit} (goal {sign} {self.goal:g}){remark}"
        )


def at_most(name: str, value: float, unit: str, goal: float, remark: str = "") -> Figure:
    """A figure that should be small."""
    return Figure(name, value, unit, goal, True, remark)


def at_least(name: str, value: float, unit: str, goal: float, remark: str = "") -> Figure:
    """A figure that should be large."""
    return Figure(name, value, unit, goal, False, remark)


def report(title: str, figures: list[Figure]) -> bool:
    """Print the figures; True when every goal is reached."""
    sys.stdout.write(f"## {title}\n")
    for figure in figures:
        sys.stdout.write(figure.line() + "\n")
    sys.stdout.write("\n")
    sys.stdout.flush()
    return all(figure.reached for figure in figures)


def median_seconds(work: Callable[[], object], runs: int = 5) -> float:
    """Median wall time of `work` after one warm-up."""
    work()
    times = []
    for _ in range(runs):
        began = time.perf_counter()
        work()
        times.append(time.perf_counter() - began)
    return statistics.median(times)
