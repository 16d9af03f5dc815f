"""Harmonics at exact multiples of the measured frequency, without resampling.

The spectrum of a window is wanted at k times a frequency that fits no grid. It is interpolated
from a slightly oversampled FFT with a 14-point kernel, exp(beta (sqrt(1 - z^2) - 1)), whose
shape is divided out of the samples beforehand (the type-2 non-uniform FFT; error about 1e-9).
"""

import functools

import numpy as np
import numpy.typing as npt

from dsp.edges import REACH, end_weights, runs

Floats = npt.NDArray[np.float64]
Phasors = npt.NDArray[np.complex128]

ORDERS = 50
TOP = 0.45  # of the sample rate: above, a front end's filter and folding leave nothing to trust
_WIDTH = 14
_OVERSAMPLING = 1.25
_BETA = 0.97 * np.pi * _WIDTH * (1.0 - 0.5 / _OVERSAMPLING)
_GROUP = 128  # windows at a time: bounds memory, keeps the FFTs in cache


def phasors(samples: Floats, begins: Floats, ends: Floats, cycles: int) -> Phasors:
    """RMS phasors of every channel in windows of `cycles` cycles each.

    Args:
        samples: (c, n), with MARGIN samples about all windows.
        begins, ends: (w,) positions in samples from the start of `samples`.
        cycles: whole cycles in every window, at least 1.
    Returns:
        (w, c, ORDERS); order 1 first; the angle is that of a cosine at the window's begin; NaN
        for orders above TOP.
    Source:
        definition of the Fourier coefficient over whole cycles (closed form).
    """
    result = np.full((len(begins), len(samples), ORDERS), np.nan, np.complex128)
    for at in range(0, len(begins), _GROUP):
        part = slice(at, at + _GROUP)
        _group(samples, begins[part], ends[part], cycles, result[part])
    return result


def _group(samples: Floats, begins: Floats, ends: Floats, cycles: int, result: Phasors) -> None:
    start = np.floor(begins).astype(np.int64) + 1 - REACH
    length = int(np.max(np.floor(ends).astype(np.int64) + 1 + REACH - start))
    length = min(length, samples.shape[1] - int(start.max()))
    size = _fast_length(int(np.ceil(_OVERSAMPLING * length)) + _WIDTH)
    nu = cycles / (ends - begins)
    orders = np.minimum(ORDERS, np.floor(TOP / nu)).astype(np.int64)
    top = int(orders.max())
    if top < 1:
        return
    weights = end_weights(begins, ends, start, length) * _compensation(length, size)
    k = np.arange(1, top + 1)
    place = nu[:, None] * k * size
    first = np.ceil(place - _WIDTH / 2.0).astype(np.int64)
    z = ((first - place)[:, :, None] + np.arange(_WIDTH)) * (2.0 / _WIDTH)
    kernel = np.exp(_BETA * (np.sqrt(np.maximum(1.0 - z * z, 0.0)) - 1.0))
    # The samples lie in the padded array with their middle at 0; turn to the window's begin.
    middle = length // 2
    turn = np.exp(2j * np.pi * nu[:, None] * k * (begins - start - middle)[:, None])
    turn *= np.sqrt(2.0) / (ends - begins)[:, None]
    row = np.arange(len(begins))[:, None]
    absent = k > orders[:, None]
    # Only in windows of few cycles does the kernel reach below bin 0, or above half the rate.
    below = max(0, -int(first.min()))
    above = max(0, int(first.max()) + _WIDTH - (size // 2 + 1))
    padded = np.zeros((len(begins), size))
    for c, channel in enumerate(samples):
        views = runs(channel, length)[start]
        np.multiply(views[:, middle:], weights[:, middle:], out=padded[:, : length - middle])
        np.multiply(views[:, :middle], weights[:, :middle], out=padded[:, size - middle :])
        spectrum = np.fft.rfft(padded, axis=1)
        if below or above:  # there the spectrum of a real signal is its mirrored conjugate
            bins = np.arange(-below, size // 2 + 1 + above)
            mirrored = (bins < 0) | (bins > size // 2)
            bins = np.where(bins > size // 2, size - bins, np.abs(bins))
            spectrum = np.where(mirrored, spectrum[:, bins].conj(), spectrum[:, bins])
        values = runs(spectrum, _WIDTH)[row, first + below]
        found = np.empty(turn.shape, np.complex128)
        np.einsum("wkt,wkt->wk", values.real, kernel, out=found.real)
        np.einsum("wkt,wkt->wk", values.imag, kernel, out=found.imag)
        found *= turn
        found[absent] = np.nan
        result[:, c, :top] = found


@functools.lru_cache(maxsize=32)
def _compensation(length: int, size: int) -> Floats:
    """One over the kernel's transform at every sample, by Gauss-Legendre quadrature."""
    nodes, quadrature = np.polynomial.legendre.leggauss(60)
    shape = quadrature * np.exp(_BETA * (np.sqrt(1.0 - nodes * nodes) - 1.0))
    n = (np.arange(length) - length // 2) / size
    transform = (_WIDTH / 2.0) * (np.cos(np.pi * _WIDTH * np.outer(n, nodes)) @ shape)
    factors: Floats = 1.0 / transform
    factors.setflags(write=False)
    return factors


@functools.lru_cache(maxsize=64)
def _fast_length(least: int) -> int:
    """Smallest even length at or above `least` with no prime factor over 5."""
    best = 1 << (least - 1).bit_length()
    five = 1
    while five < best:
        three = five
        while three < best:
            two = 2 * three
            while two < least:
                two *= 2
            best = min(best, two)
            three *= 3
        five *= 5
    return best
