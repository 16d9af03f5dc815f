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

from dsp.edges import REACH, Ends, spline_step

Floats = npt.NDArray[np.float64]

# A jump between two samples: this much of the peak-to-peak span at once, and this many times the
# steps beside it. A sine at 27 samples a cycle moves 0.116 of its span in a step, but smoothly.
JUMP_SHARE, JUMP_RATIO = 0.06, 3.0

# A crossing this many samples before a window's end, or up to REACH behind it, and the samples
# beside it see both windows' means.
NEAR_LEFT = REACH + 1


@dataclass(frozen=True, slots=True, eq=False)
class Amplitudes:
    """Figures of c channels over w windows of p parts (cycles; equal times when unlocked)."""

    mean_square: Floats  # (c, w, p)
    mean: Floats  # (c, w)
    arv: Floats  # (c, w) of x as it is
    arv_ac: Floats  # (c, w, p) of x less the window's mean
    peak_max: Floats  # (c, w)
    peak_min: Floats  # (c, w)
    jump_square: Floats  # (c, w) what unseen edge positions leave open in mean_square
    jump_arv: Floats  # (c, w) the same in arv_ac
    jump_share: Floats  # (c, w) how far edges share it alike: 1 wholly; 0 without jumps


def measure_amplitudes(
    x: Floats, begins: Floats, ends: Floats, parts: int, cyclic: bool = True
) -> Amplitudes:
    """Sum all channels.

    Args:
        x: samples (c, n), with MARGIN + 1 samples before the first and after the last end.
        begins, ends: (w,) positions in samples from the start of `x`; windows touch.
        parts: equal parts to divide each window into.
        cyclic: whether the parts are cycles, in which an edge comes back at the same place.
    """
    c, w = len(x), len(begins)
    span = ends - begins
    cuts = begins[:, None] + span[:, None] * (np.arange(parts) / parts)
    positions = np.concatenate((cuts.ravel(), ends[-1:]))
    widths = (positions[1:] - positions[:-1]).reshape(w, parts)
    at = Ends(positions)
    mean_square = at.sums(x * x).reshape(c, w, parts) / widths
    mean = at.sums(x).reshape(c, w, parts).sum(2) / span
    rectified = _rectified(x, at, mean, parts).reshape(2, c, w, parts)
    low = np.ceil(begins).astype(np.int64)
    stop = max(int(np.ceil(ends[-1])), int(low[-1]) + 1)
    peak_max = np.maximum.reduceat(x[:, :stop], low, axis=1)
    peak_min = np.minimum.reduceat(x[:, :stop], low, axis=1)
    jump_square, jump_arv, seen = _jumps(x, begins, ends, mean, peak_max - peak_min)
    share = np.ones(w)
    if cyclic and seen.any():
        share = _shared(span / parts, parts)
    return Amplitudes(
        mean_square=mean_square,
        mean=mean,
        arv=rectified[0].sum(2) / span,
        arv_ac=rectified[1] / widths,
        peak_max=peak_max,
        peak_min=peak_min,
        jump_square=jump_square * share,
        jump_arv=jump_arv * share,
        jump_share=share * seen,
    )


def _rectified(x: Floats, at: Ends, mean: Floats, parts: int) -> Floats:
    """Integrals of |x|, then of |x - mean|, over every part: (2 c, parts); `mean` is (c, w).

    Samples about a window's end belong to both windows, each with its own mean.
    """
    c, n = x.shape
    borders = at.inner[::parts]
    lengths = np.diff(borders)
    lengths[0] += borders[0]
    lengths[-1] += n - borders[-1]
    z = np.empty((2 * c, n))
    z[:c] = x
    np.subtract(x, np.repeat(mean, lengths, axis=1), out=z[c:])
    inside = np.add.reduceat(np.abs(z), at.inner, axis=1)[:, :-1]
    shift = np.zeros((2 * c, len(at.whole) + 1))  # mean left of an end, right of it
    shift[c:, 1:-1] = np.repeat(mean, parts, axis=1)
    shift[c:, [0, -1]] = mean[:, [0, -1]]
    taps = x[:, at.taps]
    taps = np.concatenate((taps, taps))
    inside += at.partial(np.abs(taps - shift[:, :-1, None]))[:, 1:]
    inside -= at.partial(np.abs(taps - shift[:, 1:, None]))[:, :-1]
    inside -= _kinks(z, at, parts)
    left, right = _end_kinks(x, at, shift, parts)
    inside[:, parts - 1 :: parts] -= left[:, 1:]
    inside[:, ::parts] -= right[:, :-1]
    return np.asarray(inside)


def _smooth(before: Floats, a: Floats, b: Floats, after: Floats) -> npt.NDArray[np.bool_]:
    """Whether a crossing from a to b is nearly straight: of noise or an edge the samples do not
    tell the slope.
    """
    step = b - a
    bend = np.maximum(np.abs(step - a + before), np.abs(step + b - after))
    return np.asarray(bend < 0.5 * np.abs(step))


def _excess(a: Floats, b: Floats) -> tuple[Floats, Floats]:
    """What a smooth crossing from a to b adds too much, and its place between them, 0..1."""
    step = np.abs(b - a)
    share = np.abs(a) / step
    return step * (share * (1.0 - share) - 1.0 / 6.0), share


def _kinks(z: Floats, at: Ends, parts: int) -> Floats:
    """What zero crossings add too much, summed per part, but for those at the windows' ends."""
    rows, length = z.shape
    count = len(at.whole) - 1
    sign = (z >= 0.0).ravel()
    n = np.flatnonzero(sign[1:] != sign[:-1])
    row, column = np.divmod(n, length)
    inner = (column >= 1) & (column + 2 < length)
    n, row, column = n[inner], row[inner], column[inner]
    flat = z.ravel()
    kept = np.flatnonzero(_smooth(flat[n - 1], flat[n], flat[n + 1], flat[n + 2]))
    n, row, column = n[kept], row[kept], column[kept]
    excess, share = _excess(flat[n], flat[n + 1])
    # A cycle begins on the fundamental's own crossing: what lies near it is shared as its ends
    # share the samples.
    ends = at.positions
    position = column + share
    part = np.searchsorted(ends, position, side="right") - 1
    part = np.minimum(np.maximum(part, 0), count - 1)
    nearest = part + (position - ends[part] > ends[part + 1] - position)
    below = spline_step(ends[nearest] - position)
    past = column - at.whole[nearest]
    excess[(nearest % parts == 0) & (past >= -NEAR_LEFT) & (past <= REACH)] = 0.0
    # One column more on either side takes what lies outside the windows.
    key = row * (count + 2) + nearest
    shares = np.bincount(key, excess * below, rows * (count + 2))
    shares += np.bincount(key + 1, excess * (1.0 - below), rows * (count + 2))
    return np.asarray(shares.reshape(rows, count + 2)[:, 1:-1])


def _end_kinks(x: Floats, at: Ends, shift: Floats, parts: int) -> tuple[Floats, Floats]:
    """The same of crossings at windows' ends: for the window before, for the one after.

    Each counts them about its own mean, so that it does not matter which windows come together.
    """
    whole = at.whole[::parts]
    near = np.arange(-NEAR_LEFT - 1, REACH + 3)
    samples = x[:, whole[:, None] + near]
    samples = np.concatenate((samples, samples))
    end = (at.positions[::parts] - whole)[:, None] - near[1:-2]
    sums: list[Floats] = []
    for side in (shift[:, :-1:parts], shift[:, 1::parts]):
        z = samples - side[:, :, None]
        before, a, b, after = z[..., :-3], z[..., 1:-2], z[..., 2:-1], z[..., 3:]
        counts = _smooth(before, a, b, after) & ((a >= 0.0) != (b >= 0.0))
        excess, share = _excess(np.where(counts, a, 0.0), np.where(counts, b, 1.0))
        excess = np.where(counts, excess, 0.0)
        below = spline_step(end - share)
        if sums:
            below = 1.0 - below
        sums.append((excess * below).sum(2))
    return sums[0], sums[1]


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
    """What the unknown place of a jump between two samples leaves open, (c, w) each.

    A jump from a to b lies anywhere between its samples (rectangular, 1 sample wide), so it
    leaves |b^2 - a^2| / sqrt(12) samples of square open; were all edges placed alike between
    samples, they would add up. Also whether there are jumps, 0 or 1.
    """
    c, w = mean.shape
    zero = np.zeros((c, w))
    reach = span.max(axis=1, keepdims=True)
    step = np.abs(x[:, 1:] - x[:, :-1])
    large = step > JUMP_SHARE * reach
    large[:, [0, -1]] = False
    n = np.flatnonzero(large)
    if not len(n):
        return zero, zero, zero
    flat, width = step.ravel(), step.shape[1]
    n = n[flat[n] > JUMP_RATIO * np.maximum(flat[n - 1], flat[n + 1])]
    row, column = np.divmod(n, width)
    part = np.searchsorted(begins, column, side="right") - 1
    kept = (part >= 0) & (column < ends[-1])
    row, column, part = row[kept], column[kept], part[kept]
    a, b = x[row, column], x[row, column + 1]
    shift = mean[row, part]
    key = row * w + part
    # Three sums of one bincount each; the root of 12 is the rectangular distribution's.
    lengths = (ends - begins) * np.sqrt(12.0)
    square = np.bincount(key, np.abs(b * b - a * a), c * w).reshape(c, w) / lengths
    arv = np.bincount(key, np.abs(np.abs(b - shift) - np.abs(a - shift)), c * w).reshape(c, w)
    seen = np.bincount(key, minlength=c * w).reshape(c, w) > 0
    return square, arv / lengths, seen.astype(np.float64)
