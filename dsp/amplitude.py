"""True RMS, mean, ARV and extremes of runs of windows, cycle by cycle.

Everything is summed once per cycle: the window's figure is the cycles' sum and their scatter is
its uncertainty. ARV (mean of |x|) has a kink at every zero crossing, and a plain sum depends on how
the samples fall about it. Where the wave passes zero smoothly between samples a and b that is put
right by the first Euler-Maclaurin term of a kink of slope s = |a| + |b| a sample at fraction
t = |a| / s: the sum is too large by s (t (1 - t) - 1/6) (closed form).
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from dsp.edges import Ends, spline_step

Floats = npt.NDArray[np.float64]

# A jump between two samples: this much of the peak-to-peak span at once, and this many times the
# steps beside it. A sine at 27 samples a cycle moves 0.116 of its span in a step, but smoothly.
JUMP_SHARE, JUMP_RATIO = 0.06, 3.0


@dataclass(frozen=True, slots=True, eq=False)
class Amplitudes:
    """Figures of one channel over w windows of p parts (cycles; 1 when unlocked)."""

    mean_square: Floats  # (w, p)
    mean: Floats  # (w,)
    arv: Floats  # (w,) of x as it is
    arv_ac: Floats  # (w, p) of x less the window's mean
    peak_max: Floats  # (w,)
    peak_min: Floats  # (w,)
    jump_square: Floats  # (w,) what unseen edge positions leave open in mean_square
    jump_arv: Floats  # (w,) the same in arv_ac
    jump_share: Floats  # (w,) how far it is shared by all edges alike: 1 wholly; 0 without jumps


def measure_amplitudes(
    x: Floats, begins: Floats, ends: Floats, parts: int, cyclic: bool = True
) -> Amplitudes:
    """Sum one channel.

    Args:
        x: samples (n,), with MARGIN samples before the first and after the last end.
        begins, ends: (w,) positions in samples from the start of `x`; windows touch.
        parts: equal parts to divide each window into.
        cyclic: whether the parts are cycles, in which an edge comes back at the same place.
    """
    w = len(begins)
    cuts = begins[:, None] + (ends - begins)[:, None] * (np.arange(parts) / parts)
    positions = np.concatenate((cuts.ravel(), ends[-1:]))
    widths = np.diff(positions).reshape(w, parts)
    at = Ends(positions)
    mean_square = at.sums(x * x).reshape(w, parts) / widths
    total = at.sums(x).reshape(w, parts)
    span = widths.sum(1)
    mean = total.sum(1) / span
    whole = Ends(np.concatenate((begins, ends[-1:])))
    arv = _rectified(x, whole, np.zeros(1), 1) / span
    arv_ac = _rectified(x, at, mean, parts).reshape(w, parts) / widths
    low = np.ceil(begins).astype(np.int64)
    high = np.append(low[1:], max(int(np.ceil(ends[-1])), int(low[-1]) + 1))
    cut = x[: high[-1]]
    peak_max = np.maximum.reduceat(cut, low)
    peak_min = np.minimum.reduceat(cut, low)
    share = _shared((ends - begins) / parts, parts) if cyclic else np.ones(w)
    jump_square, jump_arv, seen = _jumps(x, begins, ends, mean, peak_max - peak_min)
    return Amplitudes(
        mean_square=mean_square,
        mean=mean,
        arv=arv,
        arv_ac=arv_ac,
        peak_max=peak_max,
        peak_min=peak_min,
        jump_square=jump_square * share,
        jump_arv=jump_arv * share,
        jump_share=share * seen,
    )


def _rectified(x: Floats, at: Ends, mean: Floats, parts: int) -> Floats:
    """Integral of |x - mean| over every part; `mean` one a window, or a single one."""
    count = len(at.whole) - 1
    if len(mean) == 1:
        z = x - mean[0]
        shift: Floats = np.broadcast_to(mean[0], len(at.whole))
    else:
        lengths = np.diff(at.whole[::parts])
        lengths[0] += at.whole[0]
        lengths[-1] += len(x) - at.whole[-1]
        z = x - np.repeat(mean, lengths)
        shift = np.repeat(mean, parts)
        shift = np.append(shift, mean[-1])
    size = np.abs(z)
    inside = np.add.reduceat(size, at.inner)[:-1]
    # The samples about an end belong to both windows, each with its own mean.
    taps = x[at.taps]
    left = np.append(shift[0], shift[:-1])  # mean of the part that ends here
    upper = at.partial(np.abs(taps - left[:, None]))
    lower = at.partial(np.abs(taps - shift[:, None]))
    sums = inside + upper[1:] - lower[:-1]
    return sums - _kinks(z, size, at, count)


def _kinks(z: Floats, size: Floats, at: Ends, count: int) -> Floats:
    """What smooth zero crossings add too much, summed per part."""
    sign = z >= 0.0
    n = np.flatnonzero(sign[1:] != sign[:-1])
    n = n[(n >= 1) & (n + 2 < len(z))]
    step = z[n + 1] - z[n]
    bend = np.maximum(
        np.abs(z[n - 1] - 2.0 * z[n] + z[n + 1]), np.abs(z[n] - 2.0 * z[n + 1] + z[n + 2])
    )
    n = n[bend < 0.5 * np.abs(step)]
    a, b = size[n], size[n + 1]
    excess = a * b / (a + b) - (a + b) / 6.0
    position = n + a / (a + b)
    # An end sits on the fundamental's own crossing: what lies near it is shared as the ends
    # share the samples.
    ends = at.positions
    part = np.searchsorted(ends, position, side="right") - 1
    result = np.zeros(count)
    for k in (part - 1, part, part + 1):
        inside = (k >= 0) & (k < count)
        k, where = k[inside], position[inside]
        weight = spline_step(ends[k + 1] - where) - spline_step(ends[k] - where)
        result += np.bincount(k, excess[inside] * weight, count)
    return result


def _shared(cycle: Floats, count: int) -> Floats:
    """How much of an edge's unknown place is left in the mean over `count` cycles, 0..1.

    An edge that returns every `cycle` (w,) samples stands at p, p + cycle, ... between samples,
    with p unknown and everywhere alike. Where sampling keeps step with the wave every one errs
    alike and the mean as much as one; else they slide over the samples and even out. The error is
    a sawtooth of the place; its harmonic m has the share 6 / (pi m)^2 of the variance and is
    averaged to sin(pi m cycle count) / (count sin(pi m cycle)) of itself (closed form).
    """
    m = np.arange(1, 25)
    share = 6.0 / (np.pi * m) ** 2
    half_turns = np.pi * m * (cycle % 1.0)[:, None]
    below = np.sin(half_turns) * count
    level = np.abs(below) > 1e-9
    kept = np.where(level, np.sin(half_turns * count) / np.where(level, below, 1.0), 1.0)
    return np.asarray(np.sqrt((share * kept**2).sum(1) + (1.0 - share.sum())))


def _jumps(
    x: Floats, begins: Floats, ends: Floats, mean: Floats, span: Floats
) -> tuple[Floats, Floats, Floats]:
    """What the unknown place of a jump between two samples leaves open, per window.

    A jump from a to b lies anywhere between its samples (rectangular, 1 sample wide), so it
    leaves |b^2 - a^2| / sqrt(12) samples of square open; were all edges placed alike between
    samples, they would add up. Also whether there are jumps, 0 or 1.
    """
    w = len(begins)
    zero = np.zeros(w)
    step = np.abs(np.diff(x))
    n = np.flatnonzero(step > JUMP_SHARE * float(span.max(initial=0.0)))
    n = n[(n >= 1) & (n + 1 < len(step))]
    if not len(n) or not span.max(initial=0.0) > 0.0:
        return zero, zero, zero
    n = n[step[n] > JUMP_RATIO * np.maximum(step[n - 1], step[n + 1])]
    part = np.searchsorted(begins, n, side="right") - 1
    kept = (part >= 0) & (n < ends[-1])
    n, part = n[kept], part[kept]
    a, b = x[n], x[n + 1]
    width = (ends - begins) * np.sqrt(12.0)
    square = np.bincount(part, np.abs(b * b - a * a), w) / width
    shift = mean[part]
    arv = np.bincount(part, np.abs(np.abs(b - shift) - np.abs(a - shift)), w) / width
    return square, arv, (np.bincount(part, minlength=w) > 0).astype(np.float64)
