"""The length of a cycle in a stretch too short to follow a phase: one and a half to some cycles.

The wave is laid over itself, later and later; where it fits best after 1/72 to 1/38 s, that is
its cycle, whatever its shape. What fits without a fundamental of that length (a lone harmonic
fits as well) has none.
"""

import numpy as np
import numpy.typing as npt

from dsp.frequency import ACQUIRE_SHARE, HIGHEST, LOWEST

Floats = npt.NDArray[np.float64]

# Mean square of the difference over twice the variance: 0 for a wave that repeats, 1 for noise.
UNLIKE = 0.05


def cycle_length(x: Floats, rate: float) -> float:
    """Samples in one cycle of x (n,), NaN where no cycle is found.

    At least half a cycle must lie over itself, so n must be one and a half cycles or more.
    """
    z = x - x.mean()
    n = len(z)
    variance = float(z @ z) / max(n, 1)
    shortest = int(np.floor(rate / HIGHEST))
    longest = min(int(np.ceil(rate / LOWEST)), int(n / 1.5) + 1, n - 2)
    if variance <= 0.0 or shortest < 4 or longest - shortest < 2:
        return float("nan")
    lags = np.arange(shortest, longest + 1)
    size = 1 << (2 * n - 1).bit_length()
    spectrum = np.fft.rfft(z, size)
    product = np.fft.irfft(spectrum.real**2 + spectrum.imag**2, size)[lags]
    squares = np.concatenate(([0.0], np.cumsum(z * z)))
    unlike = squares[n - lags] + squares[n] - squares[lags] - 2.0 * product
    unlike = unlike / (2.0 * (n - lags) * variance)
    best = int(np.argmin(unlike))
    if best in (0, len(lags) - 1) or unlike[best] > UNLIKE:
        return float("nan")
    a, b, c = unlike[best - 1 : best + 2]
    bend = a - 2.0 * b + c
    length = float(lags[best] + (0.5 * (a - c) / bend if bend > 0.0 else 0.0))
    if not _has_fundamental(z, length):
        return float("nan")
    return length


def _has_fundamental(z: Floats, length: float) -> bool:
    """Whether a sine of that length holds a fair share of the power over whole cycles."""
    m = min(len(z), round(int(len(z) / length + 1e-6) * length))
    cycles = z[:m] - z[:m].mean()
    line = 2.0 / m * (np.exp(-2j * np.pi * np.arange(m) / length) @ cycles)
    return bool(abs(line) ** 2 / 2.0 > ACQUIRE_SHARE * float(cycles @ cycles) / m)
