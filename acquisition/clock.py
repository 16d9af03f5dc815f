"""The true sample rate, from when samples arrived.

Delays are only ever positive, so the lower hull of (index, arrival) carries the slope.
"""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class ClockEstimate:
    """What is known of the sample clock."""

    rate: float  # sets a second
    u_rate: float  # standard uncertainty, relative (1e-6 = 1 ppm), host clock's own included
    span_s: float  # how long was listened
    basis: str  # "declared", "arrival", "given"
    ppm: float | None = None  # against the declared rate; None without one
