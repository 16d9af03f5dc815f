"""Waves of unit peak as functions of phase, each with its closed form in `truths`.

Phase in rad, 0 at the upward zero crossing; any shape. Edges are ideal: between two samples there
is nothing to see of them, which is what a real converter without a filter meets too.
"""

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]


def sine(phase: Floats) -> Floats:
    """A sine."""
    return np.sin(phase)


def triangle(phase: Floats) -> Floats:
    """A triangle in step with a sine."""
    turn = np.mod(phase / (2.0 * np.pi) + 0.25, 1.0)
    return 1.0 - np.abs(4.0 * turn - 2.0)


def square(phase: Floats) -> Floats:
    """A square in step with a sine."""
    return np.where(np.mod(phase, 2.0 * np.pi) < np.pi, 1.0, -1.0)


def six_pulse(phase: Floats) -> Floats:
    """Line current of a three-phase bridge: blocks of 120 degrees about the sine's peaks."""
    within = np.mod(phase, np.pi)
    block = (within >= np.pi / 6.0) & (within < 5.0 * np.pi / 6.0)
    return np.where(block, square(phase), 0.0)


def half_wave(phase: Floats) -> Floats:
    """A half-wave rectified sine."""
    return np.maximum(np.sin(phase), 0.0)


def full_wave(phase: Floats) -> Floats:
    """A full-wave rectified sine."""
    return np.abs(np.sin(phase))


def charging_pulses(phase: Floats, width: float) -> Floats:
    """Current into a rectifier with a capacitor: a half-sine of `width` rad about each peak."""
    within = np.mod(phase, np.pi) - np.pi / 2.0
    pulse = np.where(np.abs(within) < width / 2.0, np.cos(np.pi * within / width), 0.0)
    return pulse * square(phase)


def leading_cut(phase: Floats, angle: Floats | float) -> Floats:
    """A sine cut from each zero crossing to the firing angle [rad]."""
    return np.where(np.mod(phase, np.pi) >= angle, np.sin(phase), 0.0)


def trailing_cut(phase: Floats, angle: Floats | float) -> Floats:
    """A sine that conducts from each zero crossing and is cut `angle` rad before the next."""
    return np.where(np.mod(phase, np.pi) < np.pi - angle, np.sin(phase), 0.0)
