"""Traces as characters: samples to per-column extremes to dots, by numpy and look-up tables.

Four kinds of glyphs, from fine to plain: braille (2 x 4 dots a cell), block (quarter cells), half
(1 x 2), ascii (1 x 1). A NaN is a gap and stays empty.
"""

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]
Dots = npt.NDArray[np.bool_]

_CELL = {"braille": (4, 2), "block": (2, 2), "half": (2, 1), "ascii": (1, 1)}
# Weight of each dot of a cell, row by row (Unicode braille patterns).
_BRAILLE = np.array([[0x01, 0x08], [0x02, 0x10], [0x04, 0x20], [0x40, 0x80]])
_BRAILLE_CHARS = np.array([chr(0x2800 + code) for code in range(256)])
_BLOCK = np.array([[1, 2], [4, 8]])
_BLOCK_CHARS = np.array(list(" ▘▝▀▖▌▞▛▗▚▐▜▄▙▟█"))
_HALF = np.array([[1], [2]])
_HALF_CHARS = np.array(list(" ▀▄█"))
_ASCII_CHARS = np.array([" ", "*"])


def trace_dots(
    samples: Floats, low: float, high: float, width: int, height: int, glyphs: str
) -> Dots:
    """Dots of a trace.

    Args:
        samples: (n,), NaN for gaps; spread over the whole width.
        low, high: values at the bottom and the top edge.
        width, height: in cells.
    Returns:
        (rows, columns) of dots, row 0 at the top.
    """
    down, across = _CELL[glyphs]
    rows, columns = height * down, width * across
    dots = np.zeros((rows, columns), bool)
    n = len(samples)
    if n == 0 or not high > low:
        return dots
    if n < 2 * columns:  # few samples: draw straight lines between them
        at = np.linspace(0.0, n - 1.0, 2 * columns)
        samples = np.interp(at, np.arange(n), samples)
        n = len(samples)
    cuts = (np.arange(columns) * n) // columns
    with np.errstate(invalid="ignore"):
        top = np.fmax.reduceat(samples, cuts)
        bottom = np.fmin.reduceat(samples, cuts)
    # A steep edge between columns is joined: each reaches to where its neighbour ends.
    before_top = np.concatenate((top[:1], top[:-1]))
    before_bottom = np.concatenate((bottom[:1], bottom[:-1]))
    joined_top = np.where(np.isfinite(before_bottom), np.fmax(top, before_bottom), top)
    joined_bottom = np.where(np.isfinite(before_top), np.fmin(bottom, before_top), bottom)
    seen = np.isfinite(top)
    scale = (rows - 1) / (high - low)
    upper = np.where(seen, np.rint((high - np.nan_to_num(joined_top)) * scale), rows)
    lower = np.where(seen, np.rint((high - np.nan_to_num(joined_bottom)) * scale), -1)
    row = np.arange(rows)[:, None]
    return np.asarray((row >= upper) & (row <= lower))


def characters(dots: Dots, glyphs: str) -> npt.NDArray[np.str_]:
    """(height, width) of characters for dots; an empty cell is a space."""
    down, across = _CELL[glyphs]
    rows, columns = dots.shape
    cells = dots.reshape(rows // down, down, columns // across, across).transpose(0, 2, 1, 3)
    if glyphs == "ascii":
        return np.asarray(_ASCII_CHARS[cells.any(axis=(2, 3)).astype(int)])
    weight = {"braille": _BRAILLE, "block": _BLOCK, "half": _HALF}[glyphs]
    codes = (cells * weight).sum(axis=(2, 3))
    if glyphs == "braille":
        chars = _BRAILLE_CHARS[codes]
        chars[codes == 0] = " "
        return np.asarray(chars)
    return np.asarray({"block": _BLOCK_CHARS, "half": _HALF_CHARS}[glyphs][codes])


def ticks(low: float, high: float, most: int) -> list[float]:
    """At most `most` round values (1, 2 or 5 times a power of ten apart) from low to high."""
    if not high > low or most < 1:
        return []
    rough = (high - low) / most
    power = 10.0 ** np.floor(np.log10(rough))
    step = next(f * power for f in (1.0, 2.0, 5.0, 10.0) if f * power >= rough * 0.999)
    first = np.ceil(low / step - 1e-9)
    last = np.floor(high / step + 1e-9)
    return [float(k * step) + 0.0 for k in np.arange(first, last + 1)]


def row_of(value: float, low: float, high: float, height: int) -> int | None:
    """The cell row at which a value lies; None outside."""
    if not low <= value <= high or not high > low:
        return None
    return min(height - 1, max(0, round((high - value) / (high - low) * height - 0.5)))


def bars(fractions: Floats, height: int, glyphs: str) -> list[str]:
    """Upright bars, one a column; 1.0 fills the height."""
    ink = np.array(list("    #####" if glyphs == "ascii" else " ▁▂▃▄▅▆▇█"))
    fractions = np.nan_to_num(np.asarray(fractions, float))
    floors = np.arange(height - 1, -1, -1)[:, None]
    parts = np.clip(fractions * height - floors, 0.0, 1.0)
    if glyphs != "ascii":  # the least of a share still shows
        parts[-1] = np.where(fractions > 0.0, np.maximum(parts[-1], 0.125), 0.0)
    return ["".join(row) for row in ink[np.rint(parts * 8).astype(int)].tolist()]
