"""Sums over windows whose ends fall between samples.

A window from `a` to `b` takes every sample with the weight C(b - n) - C(a - n), C being the
integral of a cubic B-spline: 1 well inside, 0 well outside, smooth over SPREAD * 2 samples at each
end. The weights sum to b - a exactly (partition of unity), and over whole cycles of a band-limited
wave the ends' error falls with the fourth power of frequency over rate (closed form). The spline is
twice as wide as the samples stand apart: that takes a wave with much near 0.4 of the rate from 1.3
to under 1 ppm.
"""

from typing import TypeVar

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]
Number = TypeVar("Number", np.float64, np.complex128)

SPREAD = 2  # knots of the spline are this many samples apart
REACH = 2 * SPREAD  # samples on either side of an end that are weighted
MARGIN = REACH + 1  # samples needed before floor(a) and after floor(b)


def spline_step(t: Floats) -> Floats:
    """Integral of the spline up to `t` samples past its centre; 0 and 1 beyond its reach."""
    u = np.minimum(np.abs(t) * (1.0 / SPREAD), 2.0)
    # Products, not powers: numpy's power is ten times slower.
    square = u * u
    inner = u * (2.0 / 3.0 - square * (1.0 / 3.0 - u / 8.0))
    rest = (2.0 - u) * (2.0 - u)
    outer = 0.5 - rest * rest / 24.0
    return 0.5 + np.copysign(np.where(u < 1.0, inner, outer), t)


class Ends:
    """Positions of window or cycle ends, prepared once and used for several sums."""

    def __init__(self, positions: Floats) -> None:
        """Prepare ends at `positions` (k,), ascending, in samples from the array's start."""
        self.positions = positions
        self.whole = np.floor(positions).astype(np.int64)
        part = positions - self.whole
        near = np.arange(1 - REACH, 1 + REACH)
        self.inner = self.whole + 1 - REACH  # first sample that is not wholly below the end
        self.taps = self.whole[:, None] + near
        self.weights = spline_step(part[:, None] - near)

    def partial(self, values: Floats) -> Floats:
        """What the samples about each end add below it; `values` (..., k, taps) are theirs."""
        return np.asarray((values * self.weights).sum(-1))

    def sums(self, y: Floats) -> Floats:
        """Sums of y (..., n) between neighbouring ends; one fewer than there are ends."""
        inside = np.add.reduceat(y, self.inner, axis=-1)[..., :-1]
        partial = self.partial(y[..., self.taps])
        inside += partial[..., 1:]
        inside -= partial[..., :-1]
        return np.asarray(inside)


def end_weights(a: Floats, b: Floats, start: npt.NDArray[np.int64], length: int) -> Floats:
    """Weights (w, length) of samples start..start+length for windows from a to b, each (w,)."""
    n = start[:, None] + np.arange(length)
    weights = np.ones((len(a), length))
    head = np.arange(min(length, 2 * REACH + 2))
    weights[:, head] -= spline_step(a[:, None] - n[:, head])
    # Past the end all is 0; only the last few samples of each window lie near it.
    tail = np.arange(max(0, int(np.min(np.floor(b) - start)) - REACH - 1), length)
    weights[:, tail] *= spline_step(b[:, None] - n[:, tail])
    return weights


def runs(x: npt.NDArray[Number], length: int) -> npt.NDArray[Number]:
    """Every run of `length` neighbours on the last axis of x (n,) or (k, n), without a copy.

    What numpy's sliding_window_view gives, in a tenth of its time, which counts for one window
    live. x must be contiguous on that axis.
    """
    shape = (*x.shape[:-1], x.shape[-1] - length + 1, length)
    strides = (*x.strides, x.strides[-1])
    return np.ndarray(shape, x.dtype, x, 0, strides)
