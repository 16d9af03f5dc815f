"""Urms(1/2): one-cycle RMS refreshed every half cycle (IEC 61000-4-30, from memory, not read).

Half cycles begin at the fundamental's zero crossings, where the windows' own ends are. Each value
is placed at the end of its cycle.
"""

import numpy as np
import numpy.typing as npt

from dsp.edges import MARGIN, Ends
from dsp.window import Windows

Floats = npt.NDArray[np.float64]


def half_cycle_squares(windows: Windows, channel: int) -> tuple[Floats, Floats]:
    """Mean squares of the half cycles of a run of locked windows.

    Args:
        windows: a run with whole cycles; neighbours touch.
        channel: which row.
    Returns:
        (k,) positions of the half cycles' ends, fractional set indices since the stream began,
        and (k,) mean squares; two for each cycle.
    Raises:
        ValueError: the windows are not cut by cycles.
    """
    halves = 2 * int(windows.cycles[0])
    if halves < 2:
        raise ValueError("windows without cycles have no half cycles")
    first = windows.first
    parts = np.arange(halves) / halves
    widths = windows.ends - windows.begins
    cuts = (windows.begins[:, None] + widths[:, None] * parts).ravel()
    positions = np.append(cuts, windows.ends[-1])
    x = windows.samples[channel]
    low = max(0, MARGIN - (int(np.floor(positions[0])) - first))
    high = max(0, MARGIN + 1 - (first + len(x) - int(np.floor(positions[-1]))))
    if low or high:
        x = np.pad(x, (low, high), mode="edge")
    sums = Ends(positions - (first - low)).sums(x * x)
    return positions[1:], np.maximum(sums / np.diff(positions), 0.0)
