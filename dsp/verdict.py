"""Verdict: would this kind of meter mislead here, by how much, and how sure is that.

The error of a card comes from one set of samples, so gain and divider errors cancel in it. The
judgement has memory: it changes only after two windows in a row say so, and it leaves a state at
a lower threshold than it entered, so that a wave sitting at the limit does not make it flicker.
"""

from dataclasses import dataclass
from enum import StrEnum


class Judgement(StrEnum):
    """What is said of a meter's reading."""

    AGREES = "agrees"
    MISLEADS = "misleads"
    UNSURE = "unsure"


@dataclass(frozen=True, slots=True)
class Verdict:
    """What one meter card would show in one window on one channel, against the true RMS."""

    card: str
    reading: float  # in the channel's unit; NaN when there is no reading
    error: float  # fraction of the true RMS, signed
    u_error: float  # standard uncertainty of `error`
    judgement: Judgement
