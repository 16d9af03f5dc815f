"""Phase-cut waves: is this one, and at which firing angle.

The averaging error alone gives the angle of an ideal cut, whatever the supply:
averaging / true = ((1 + cos a) / 2) / sqrt(1 - a/pi + sin(2a)/(2 pi)) (closed form). Whether the
wave is a cut one at all is decided by its 3rd, 5th and 7th harmonics: their sizes and angles
against the fundamental must be those of that angle. Trailing edge is leading edge reversed in
time, its harmonics the conjugates; its angle too counts the part of the half-cycle cut away.
"""

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

LEAST = np.radians(12.0)  # below, a cut is not told from an ordinary distorted supply
ORDERS = (3, 5, 7)
# How far the three harmonics may lie from an ideal cut, relative to the fundamental and to
# themselves: real edges take 100 to 500 us and rectifiers look different by far more.
ABSOLUTE, RELATIVE = 0.01, 0.22

_ANGLES = np.linspace(0.0, np.pi - 0.01, 4001)


def cut_rms(angle: Floats) -> Floats:
    """RMS of a cut sine over that of the whole one (closed form)."""
    return np.sqrt(np.maximum(1.0 - angle / np.pi + np.sin(2.0 * angle) / (2.0 * np.pi), 0.0))


def cut_harmonic(angle: Floats, order: int) -> npt.NDArray[np.complex128]:
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


def _ratio(angle: Floats) -> Floats:
    return np.asarray((1.0 + np.cos(angle)) / 2.0 / np.maximum(cut_rms(angle), 1e-12))


_RATIOS = _ratio(_ANGLES)


def _aligned(order: int) -> npt.NDArray[np.complex128]:
    """Harmonic over fundamental on the table's angles, in the fundamental's own phase."""
    first = cut_harmonic(_ANGLES, 1)
    turn = first / np.abs(first)
    return np.asarray(cut_harmonic(_ANGLES, order) / np.abs(first) / turn**order)


_TEMPLATES = np.array([_aligned(order) for order in ORDERS])


def firing_angle(
    error: Floats, u_error: Floats, lines: npt.NDArray[np.complex128]
) -> tuple[Floats, Floats]:
    """Mean firing angle and its standard uncertainty [rad], NaN where the wave is not cut.

    Args:
        error: (w, c) averaging error, fraction.
        u_error: (w, c) its standard uncertainty.
        lines: (w, c, orders) harmonic phasors.
    """
    ratio = 1.0 + np.nan_to_num(error, nan=0.0)
    angle = np.interp(ratio, _RATIOS[::-1], _ANGLES[::-1])
    first = lines[..., 0]
    size = np.abs(first)
    with np.errstate(invalid="ignore", divide="ignore"):
        turn = first / size
        found = np.stack([lines[..., h - 1] / size / turn**h for h in ORDERS])
    place = angle / _ANGLES[-1] * (len(_ANGLES) - 1)
    low = np.minimum(place.astype(np.int64), len(_ANGLES) - 2)
    part = place - low
    template = _TEMPLATES[:, low] * (1.0 - part) + _TEMPLATES[:, low + 1] * part
    room = ABSOLUTE + RELATIVE * np.sqrt((np.abs(template) ** 2).sum(0))
    with np.errstate(invalid="ignore"):
        leading = np.sqrt((np.abs(found - template) ** 2).sum(0)) < room
        trailing = np.sqrt((np.abs(found - template.conj()) ** 2).sum(0)) < room
    cut = (leading | trailing) & (angle > LEAST) & np.isfinite(error)
    slope = np.gradient(_RATIOS, _ANGLES)
    u_angle = u_error / np.maximum(np.abs(np.interp(angle, _ANGLES, slope)), 1e-6)
    return np.where(cut, angle, np.nan), np.where(cut, u_angle, np.nan)
