"""Power of one voltage/current pair in one window (IEEE 1459 definitions)."""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Power:
    """Figures of one pair in one window. A figure that does not exist is NaN."""

    voltage: str  # channel names
    current: str
    start: float  # s on the sample clock
    duration: float  # s
    p: float  # active [W]
    s: float  # apparent [VA]
    pf: float  # p / s
    dpf: float  # fundamental power factor, cos of the fundamental's angle
    q1: float  # fundamental reactive [var]
    distortion: float  # sqrt(S^2 - P1^2 - Q1^2) = SN, non-fundamental apparent [VA]
    energy: float  # since the stream began [Wh]
    u_p: float  # standard uncertainty of p [W]
