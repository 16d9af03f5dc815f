"""Phase-cut waves: is this one, and at which firing angle.

The odd harmonics of a cut sine are a closed form of the angle. Turned to their own fundamental's
phase they depend on nothing else, so the angle is found by fitting orders 3 to 25 to that form;
the harmonics' sums leave noise and DC out. An edge takes its time: an edge that rises over some
degrees is the mean of ideal cuts over them, and the angle is that of its middle. Low orders count
for little in the fit, since a supply's own distortion lies there; it is the high ones that tell
an edge from a rectifier's round pulse. Trailing edge is leading edge reversed in time, its
harmonics the conjugates; its angle too counts the part of the half-cycle that is cut away.
"""

import functools

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]
Phasors = npt.NDArray[np.complex128]

# Below, a cut is not told from a distorted supply; above, not from a narrow pulse.
LEAST, MOST = np.radians(12.0), np.radians(168.0)

ORDERS = np.arange(3, 26, 2)
_PLACES = slice(2, 25, 2)  # of those orders in an array that begins with order 1
# How far a harmonic may be off, over the fundamental: the supply's own (the usual limits for low
# voltage allow 5 % of the 3rd, 6 % of the 5th, 5 % of the 7th; from memory, not read), noise and
# folding.
_SPREAD = np.where(
    ORDERS <= 7, np.interp(ORDERS, (3, 7), (0.10, 0.06)), np.where(ORDERS == 9, 0.02, 0.008)
)
# An ideal edge folds; orders up to this share of the rate are still four fifths their own.
_FOLDING = 0.16
# Without these orders an edge and a pulse look alike.
_NEEDED, _ALWAYS = 13, 15
# Orders 9 and above of a cut at LEAST hold 6e-4 of the fundamental's power; below this there is
# no edge and nothing is fitted.
_EDGE_POWER = 2e-4
# Weighted share of the harmonics' power that an accepted angle leaves unexplained: a supply with
# 3 % of 3rd and 5th reaches 0.14 at 15 degrees, 0.02 above 140. A rectifier's pulses of 30 degrees
# and more leave over 0.1, narrower ones resemble a late cut.
_UNEXPLAINED = ((0.0, 15.0, 30.0, 120.0, 140.0, 180.0), (0.15, 0.15, 0.10, 0.10, 0.03, 0.02))

_FINE = np.radians(0.1)  # grid of the tables; cuts at its cells' middles
_COARSE = 25  # fine cells between angles tried first: at order 25, a sixth of a turn
_RISES = (0, 25, 50, 100)  # fine cells an edge rises over; 100 is 0.5 ms at 56 Hz
_ROWS = 2048  # at a time: bounds memory


def cut_rms(angle: Floats) -> Floats:
    """RMS of a cut sine over that of the whole one (closed form)."""
    return np.sqrt(np.maximum(1.0 - angle / np.pi + np.sin(2.0 * angle) / (2.0 * np.pi), 0.0))


def cut_harmonic(angle: Floats, order: int) -> Phasors:
    """Phasor of a harmonic of a leading-edge cut, as a cosine, over the supply's RMS.

    Closed form: the Fourier integral of sin t from the angle to pi.
    """
    h = order
    if h == 1:
        c = -(np.sin(angle) ** 2) / np.pi
        s = (np.pi - angle + np.sin(2.0 * angle) / 2.0) / np.pi
        return np.asarray(c - 1j * s)

    def cosine(t: Floats) -> Floats:
        return np.asarray(-np.cos((h + 1) * t) / (h + 1) + np.cos((h - 1) * t) / (h - 1))

    def sine(t: Floats) -> Floats:
        return np.asarray(np.sin((h - 1) * t) / (h - 1) - np.sin((h + 1) * t) / (h + 1))

    end = np.full_like(angle, np.pi)
    c = (cosine(end) - cosine(angle)) / np.pi
    s = (sine(end) - sine(angle)) / np.pi
    return np.asarray(c - 1j * s)


def firing_angle(lines: Phasors, nu: Floats, u_edge: Floats) -> tuple[Floats, Floats]:
    """Mean firing angle and its standard uncertainty [rad], NaN where the wave is not cut.

    Args:
        lines: (w, c, orders) harmonic phasors from order 1.
        nu: (w,) frequency over sample rate; NaN when unlocked.
        u_edge: (w, c) what the samples leave open in the edges' place [rad].
    """
    w, c = lines.shape[:2]
    angle, u_angle = np.full(w * c, np.nan), np.full(w * c, np.nan)
    if lines.shape[2] >= ORDERS[-1]:
        flat = lines.reshape(w * c, -1)
        reach = np.repeat(np.nan_to_num(nu), c)
        size = np.abs(flat[:, 0])
        tail = flat[:, 8 : ORDERS[-1] : 2]  # orders 9, 11, ...
        power = np.nansum(tail.real**2 + tail.imag**2, axis=1)
        tried = np.flatnonzero((power > _EDGE_POWER * size**2) & (size > 0.0))
        for at in range(0, len(tried), _ROWS):
            rows = tried[at : at + _ROWS]
            angle[rows], u_angle[rows] = _fit(flat[rows], reach[rows])
    return angle.reshape(w, c), np.hypot(u_angle.reshape(w, c), u_edge)


def _fit(lines: Phasors, nu: Floats) -> tuple[Floats, Floats]:
    """Angles of rows of phasors (r, orders) that have a fundamental."""
    size = np.abs(lines[:, 0])
    back = lines[:, 0].conj() / size
    found = lines[:, _PLACES] / size[:, None] * back[:, None] ** ORDERS
    top = np.minimum(np.maximum(_FOLDING / nu, _ALWAYS), 0.45 / nu)
    usable = (top[:, None] >= ORDERS) & np.isfinite(found.real)
    weight = usable / _SPREAD**2
    found = np.where(usable, found, 0.0)
    trailing, rise, cell = _nearest(found, weight)
    found = np.where(trailing[:, None], found.conj(), found)
    table = _tables()
    last = table.shape[1] - 2
    place = cell.astype(np.float64)
    for _ in range(3):  # Gauss-Newton: from 1.3 degrees off to under a thousandth
        low = place.astype(np.int64)
        here = table[rise, low]
        slope = table[rise, low + 1] - here
        rest = found - here - slope * (place - low)[:, None]
        steep = (weight * (slope.real**2 + slope.imag**2)).sum(1)
        move = (weight * (rest * slope.conj()).real).sum(1) / steep
        move = np.minimum(np.maximum(move, -_COARSE), _COARSE)
        place = np.minimum(np.maximum(place + move, 0.0), last)
    shape = found - rest
    left = (weight * np.abs(rest) ** 2).sum(1)
    whole = (weight * np.abs(shape) ** 2).sum(1)
    angle = (place + 0.5) * _FINE
    allowed = np.interp(np.degrees(angle), *_UNEXPLAINED)
    free = np.maximum(2 * usable.sum(1) - 2, 1)
    u_angle = np.sqrt(left / free / steep) * _FINE
    cut = (left < allowed * whole) & (angle > LEAST) & (angle < MOST) & (top >= _NEEDED)
    return np.where(cut, angle, np.nan), np.where(cut, u_angle, np.nan)


def _nearest(
    found: Phasors, weight: Floats
) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.int64], npt.NDArray[np.int64]]:
    """The nearest tabled cut of each row: whether trailing, index of its rise, fine cell."""
    forms, squares, rises, cells = _coarse()
    scaled = found * weight
    base = weight @ squares
    real, imag = scaled.real @ forms.real, scaled.imag @ forms.imag
    # The part common to all, the row's own square, decides nothing.
    distance = np.stack((base - 2.0 * (real + imag), base - 2.0 * (real - imag)), axis=1)
    best = np.argmin(distance.reshape(len(found), -1), axis=1)
    trailing, form = np.divmod(best, len(cells))
    return trailing == 1, rises[form], cells[form]


@functools.cache
def _tables() -> Phasors:
    """Harmonics over the fundamental, in its phase: (rises, fine cells, orders)."""
    cells = round(np.pi / _FINE)
    angle = (np.arange(cells) + 0.5) * _FINE
    plain = np.stack([cut_harmonic(angle, int(h)) for h in (1, *ORDERS)], axis=1)
    tables = []
    for rise in _RISES:
        mean = plain
        if rise:
            # Past half a turn there is nothing left to conduct: such an edge is cut off there.
            padded = np.concatenate((plain[:1].repeat(rise, 0), plain, 0.0 * plain[:rise]))
            total = np.cumsum(padded, axis=0)
            low = np.arange(cells) + rise - rise // 2
            mean = (total[low + rise - 1] - total[low - 1]) / rise
        first = mean[:, :1]
        turn = first / np.abs(first)
        tables.append(mean[:, 1:] / np.abs(first) / turn**ORDERS)
    return np.stack(tables)


@functools.cache
def _coarse() -> tuple[Phasors, Floats, npt.NDArray[np.int64], npt.NDArray[np.int64]]:
    """Forms tried first: (orders, f), their squares, the index of each one's rise, its cell."""
    tables = _tables()
    forms, rises, cells = [], [], []
    for k, rise in enumerate(_RISES):
        at = np.arange(100, tables.shape[1] - 80, _COARSE)
        # An edge as slow as the rest of the half-cycle would be any pulse at all.
        at = at[4 * rise <= tables.shape[1] - at]
        forms.append(tables[k, at])
        rises.append(np.full(len(at), k))
        cells.append(at)
    form = np.concatenate(forms).T
    return form, np.abs(form) ** 2, np.concatenate(rises), np.concatenate(cells)
