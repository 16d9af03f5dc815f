"""Closed-form truths of the waves, worked by hand; they owe nothing to the measuring.

Every figure is an integral over whole cycles. `Truth` holds unit-peak figures times the peak.
"""

import math
from dataclasses import dataclass

FORM_FACTOR_OF_SINE = math.pi / (2.0 * math.sqrt(2.0))  # rms over mean of |sin|


@dataclass(frozen=True, slots=True)
class Truth:
    """What a perfect instrument would find."""

    rms: float
    arv: float  # of the wave as it is
    peak: float
    mean: float = 0.0
    thd_f: float | None = None  # over all orders; None: not worked out
    firing_angle: float | None = None  # rad; None: not a cut wave

    @property
    def averaging(self) -> float:
        """What a mean-responding meter scaled for a sine shows; waves without DC only."""
        return FORM_FACTOR_OF_SINE * self.arv

    @property
    def averaging_error(self) -> float:
        """Its error as a fraction; 0 where there is nothing to read."""
        return self.averaging / self.rms - 1.0 if self.rms else 0.0

    @property
    def crest_factor(self) -> float:
        """Peak over rms."""
        return self.peak / self.rms if self.rms else math.nan


def sine(rms: float) -> Truth:
    """A sine: mean of |sin| is 2/pi."""
    peak = math.sqrt(2.0) * rms
    return Truth(rms, 2.0 / math.pi * peak, peak, thd_f=0.0)


def square(peak: float) -> Truth:
    """A square; fundamental 4/pi of the peak, so THD-F = sqrt(pi^2/8 - 1)."""
    return Truth(peak, peak, peak, thd_f=math.sqrt(math.pi**2 / 8.0 - 1.0))


def triangle(peak: float) -> Truth:
    """A triangle; fundamental 8/pi^2 of the peak, so THD-F = sqrt(pi^4/96 - 1)."""
    return Truth(peak / math.sqrt(3.0), peak / 2.0, peak, thd_f=math.sqrt(math.pi**4 / 96.0 - 1.0))


def six_pulse(peak: float) -> Truth:
    """Blocks of 120 degrees; fundamental rms sqrt(6)/pi of the peak."""
    rms = math.sqrt(2.0 / 3.0) * peak
    return Truth(rms, 2.0 / 3.0 * peak, peak, thd_f=math.sqrt(math.pi**2 / 9.0 - 1.0))


def charging_pulses(peak: float, width: float) -> Truth:
    """Half-sines of `width` rad: mean square width/(2 pi), mean of |x| 2 width/pi^2."""
    return Truth(peak * math.sqrt(width / (2.0 * math.pi)), peak * 2.0 * width / math.pi**2, peak)


def phase_cut(supply_rms: float, angle: float) -> Truth:
    """A sine cut at `angle` rad, leading or trailing edge (the same levels).

    rms/V0 = sqrt(1 - a/pi + sin(2a)/(2 pi)); arv/V0 = sqrt(2) (1 + cos a)/pi; fundamental
    V0/pi |(sin^2 a, pi - a + sin(2a)/2)|; the peak is the sine's own up to 90 degrees.
    """
    r = math.sqrt(max(0.0, 1.0 - angle / math.pi + math.sin(2.0 * angle) / (2.0 * math.pi)))
    arv = math.sqrt(2.0) * (1.0 + math.cos(angle)) / math.pi
    peak = math.sqrt(2.0) * (1.0 if angle <= math.pi / 2.0 else math.sin(angle))
    first = (
        math.hypot(math.sin(angle) ** 2, math.pi - angle + math.sin(2.0 * angle) / 2.0) / math.pi
    )
    thd = math.sqrt(max(0.0, r * r / first**2 - 1.0)) if first > 0.0 else None
    return Truth(supply_rms * r, supply_rms * arv, supply_rms * peak, thd_f=thd, firing_angle=angle)


def neutral_of_three(full_current: float, angle: float) -> float:
    """RMS of the neutral of three equal resistive phases cut at `angle` rad, star connected.

    Up to 60 degrees sqrt(3) r(180 - a), from 120 on sqrt(3) r(a); between, the conduction of two
    phases overlaps: In^2 = 3 r^2 - 6 O, O = ((2 pi/3 - a) + sqrt(3)/2 + sin(2a + 60 deg))/(2 pi).
    """

    def r(a: float) -> float:
        return math.sqrt(max(0.0, 1.0 - a / math.pi + math.sin(2.0 * a) / (2.0 * math.pi)))

    if angle <= math.pi / 3.0:
        return full_current * math.sqrt(3.0) * r(math.pi - angle)
    if angle >= 2.0 * math.pi / 3.0:
        return full_current * math.sqrt(3.0) * r(angle)
    overlap = (
        (2.0 * math.pi / 3.0 - angle) + math.sqrt(3.0) / 2.0 + math.sin(2.0 * angle + math.pi / 3.0)
    ) / (2.0 * math.pi)
    return full_current * math.sqrt(max(0.0, 3.0 * r(angle) ** 2 - 6.0 * overlap))
