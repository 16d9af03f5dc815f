"""The phase of the fundamental over time, and from it the frequency.

The reference is multiplied by a rotating phasor under a smooth taper of three cycles (three
one-cycle moving averages in a row), so that harmonics and DC vanish; one such product stands
every half cycle. The angle is the fundamental's phase there. A line through the phases of a
window is its frequency; the scatter about the line says how sure that is and whether there is a
fundamental at all. Beyond the first and last point a parabola carries the phase on, so that a
drifting frequency is followed there too.
"""

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

LOWEST, HIGHEST = 38.0, 72.0  # Hz: where a mains fundamental is looked for
# To lock: the line's share of the power (white noise of n samples gives 40/n once in 1e16
# windows), and phase and amplitude steady over two windows.
ACQUIRE_SHARE, ACQUIRE_SCATTER, ACQUIRE_RIPPLE = 0.03, 0.12, 0.25
CURVE_POINTS = 10  # fewer do not tell a drift from noise: a line it is


class PhaseTracker:
    """Phases of a fundamental near `nu` cycles a sample, on a grid of half cycles."""

    def __init__(self, nu: float, first_sample: int) -> None:
        """Track near `nu`; `first_sample` is the index of the first sample it will be given."""
        self.nu = nu
        cycle = max(2, round(1.0 / nu))
        self.hop = max(1, round(0.5 / nu))
        box = np.ones(cycle)
        taper = np.convolve(np.convolve(box, box), box)
        self.length = len(taper)
        n = np.arange(self.length) - (self.length - 1) / 2.0
        kernel = taper * np.exp(-2j * np.pi * nu * n) * (2.0 / taper.sum())
        # The kernel in pieces of a hop, one beside the other: every sample then enters one
        # product only, and a point is the sum of its pieces' results.
        self._pieces = -(-self.length // self.hop)
        padded = np.zeros(self._pieces * self.hop, np.complex128)
        padded[: self.length] = kernel
        pieces = padded.reshape(self._pieces, self.hop).T
        self._kernel = np.concatenate((pieces.real, pieces.imag), axis=1)
        self.origin = first_sample  # sample under the first taper's first weight
        self.centre = first_sample + (self.length - 1) / 2.0  # position of point 0
        self.phase = np.empty(0)  # unwrapped angle of the fundamental as a cosine [rad]
        self.amplitude = np.empty(0)  # peak value, in the signal's unit
        self._dropped = 0  # points let go at the front

    @property
    def points(self) -> int:
        """How many points there are, those let go included."""
        return self._dropped + len(self.phase)

    def next_sample(self) -> int:
        """First sample that the next point needs."""
        return self.origin + self.points * self.hop

    def extend(self, samples: Floats, first: int) -> None:
        """Add every point that `samples` (n,), which start at index `first`, allow."""
        skip = self.next_sample() - first
        count = (len(samples) - skip - self._pieces * self.hop) // self.hop + 1
        if count <= 0:
            return
        blocks = count + self._pieces - 1
        shares = samples[skip : skip + blocks * self.hop].reshape(blocks, self.hop) @ self._kernel
        real, imaginary = np.zeros(count), np.zeros(count)
        for piece in range(self._pieces):
            real += shares[piece : piece + count, piece]
            imaginary += shares[piece : piece + count, self._pieces + piece]
        angles = np.arctan2(imaginary, real)
        ahead = 2.0 * np.pi * self.nu * self.hop
        last = self.phase[-1] if len(self.phase) else angles[0] - ahead
        steps = np.diff(angles, prepend=last) - ahead
        steps -= 2.0 * np.pi * np.round(steps / (2.0 * np.pi))
        phase = last + np.cumsum(steps + ahead)
        # cumsum drifts by rounding only; snap each point back to its own angle.
        phase = angles + 2.0 * np.pi * np.round((phase - angles) / (2.0 * np.pi))
        self.phase = np.concatenate((self.phase, phase))
        self.amplitude = np.concatenate((self.amplitude, np.hypot(real, imaginary)))

    def drop_before(self, position: float) -> None:
        """Let go of points before `position`, keeping two."""
        spare = int((position - self.centre) / self.hop) - self._dropped - 2
        if spare > 0:
            self.phase, self.amplitude = self.phase[spare:], self.amplitude[spare:]
            self._dropped += spare

    def positions(self) -> Floats:
        """Where the kept points stand."""
        return self.centre + self.hop * (
            self._dropped + np.arange(len(self.phase), dtype=np.float64)
        )

    def phase_at(self, position: float) -> float:
        """Phase at a position, carried on straight beyond the points."""
        at = self.positions()
        inside = float(np.clip(position, at[0], at[-1]))
        phase = float(np.interp(inside, at, self.phase))
        return phase + 2.0 * np.pi * self.nu * (position - inside)

    def curve(self, first: float, last: float) -> "Curve":
        """The parabola through the points between two positions; a line through few points."""
        at = self.positions()
        low, high = np.searchsorted(at, (first - 1e-6, last + 1e-6))
        low = int(min(low, max(0, len(at) - 3)))
        high = int(max(high, low + 1))
        middle = float(at[low:high].mean())
        u = (at[low:high] - middle) / self.hop
        degree = 2 if len(u) >= CURVE_POINTS else min(1, len(u) - 1)
        terms = np.vander(u, degree + 1, increasing=True)
        factors, *_ = np.linalg.lstsq(terms, self.phase[low:high])
        rest = self.phase[low:high] - terms @ factors
        scatter = math.sqrt(float(rest @ rest) / max(len(u) - degree - 1, 1))
        padded = np.zeros(3)
        padded[: degree + 1] = factors
        return Curve(middle, self.hop, padded, scatter)

    def fit(self, begins: Floats, ends: Floats) -> "LineFit":
        """Lines through the points of windows from `begins` to `ends`, each (w,)."""
        base = self.centre + self.hop * self._dropped
        low = np.clip(np.ceil((begins - base) / self.hop), 0, None).astype(np.int64)
        high = np.clip(np.floor((ends - base) / self.hop), 0, max(0, len(self.phase) - 1)).astype(
            np.int64
        )
        count = np.maximum(high - low + 1, 1)
        low = np.minimum(low, max(0, len(self.phase) - 1))
        index = low[:, None] + np.arange(int(count.max()))
        mask = index <= high[:, None]
        index = np.minimum(index, len(self.phase) - 1)
        at = (index - low[:, None]).astype(float)
        weight = mask.astype(float)
        phase = self.phase[index] - self.phase[low][:, None]
        amplitude = self.amplitude[index]
        n = np.maximum(weight.sum(1), 1.0)
        mean_at = (weight * at).sum(1) / n
        centred = weight * (at - mean_at[:, None])
        spread = np.maximum((centred * (at - mean_at[:, None])).sum(1), 1e-12)
        mean_phase = (weight * phase).sum(1) / n
        slope = (centred * phase).sum(1) / spread
        rest = weight * (phase - mean_phase[:, None] - slope[:, None] * (at - mean_at[:, None]))
        scatter = np.sqrt((rest**2).sum(1) / np.maximum(n - 2.0, 1.0))
        mean_amplitude = (weight * amplitude).sum(1) / n
        ripple = np.sqrt((weight * (amplitude - mean_amplitude[:, None]) ** 2).sum(1) / n)
        # Neighbouring tapers overlap: about five points in a row carry one independent phase,
        # which makes the slope of a line through n points that much less sure.
        u_slope = scatter * np.sqrt(5.0 / spread)
        return LineFit(
            nu=slope / (2.0 * np.pi * self.hop),
            u_nu=u_slope / (2.0 * np.pi * self.hop),
            phase=self.phase[low] + mean_phase,
            at=base + self.hop * (low + mean_at),
            scatter=scatter,
            amplitude=mean_amplitude,
            ripple=ripple / np.maximum(mean_amplitude, 1e-300),
            points=n,
        )


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """A parabola through phase points."""

    middle: float  # position it is centred on
    hop: float  # samples a point
    factors: Floats  # (3,) of powers of (position - middle) / hop [rad]
    scatter: float  # rad, about the parabola

    def phase(self, position: Floats) -> Floats:
        """Phase at positions [rad]."""
        u = (position - self.middle) / self.hop
        return np.asarray(self.factors[0] + u * (self.factors[1] + u * self.factors[2]))

    def nu(self, position: float) -> float:
        """Cycles a sample at a position."""
        u = (position - self.middle) / self.hop
        return float(self.factors[1] + 2.0 * u * self.factors[2]) / (2.0 * math.pi * self.hop)

    def reach(self, phases: Floats, near: Floats) -> Floats:
        """Positions of phases, each sought from the position `near` it."""
        for _ in range(3):  # Newton: a quarter cycle off leaves 1e-9 after three
            u = (near - self.middle) / self.hop
            slope = (self.factors[1] + 2.0 * u * self.factors[2]) / self.hop
            near = near - (self.phase(near) - phases) / slope
        return near


@dataclass(frozen=True, slots=True, eq=False)
class LineFit:
    """Lines through phase points, one a window; every column (w,)."""

    nu: Floats  # cycles a sample
    u_nu: Floats  # standard uncertainty
    phase: Floats  # rad, at position `at`
    at: Floats
    scatter: Floats  # rad, about the line
    amplitude: Floats  # mean peak value of the fundamental
    ripple: Floats  # scatter of the amplitude, relative
    points: Floats


def coarse(samples: Floats, rate: float) -> tuple[float, float]:
    """Strongest line between 38 and 72 Hz.

    Args:
        samples: (n,), at least 0.1 s.
        rate: samples a second.
    Returns:
        its frequency [Hz] and its share of the power that varies (0 where nothing varies).
    """
    x = samples - samples.mean()
    power = float(np.dot(x, x)) / len(x)
    if power <= 0.0 or rate <= 2.0 * HIGHEST:
        return 0.0, 0.0
    taper = np.hanning(len(x) + 2)[1:-1]
    size = 1 << (4 * len(x) - 1).bit_length()
    spectrum = np.abs(np.fft.rfft(x * taper, size)) * (2.0 / taper.sum())
    step = rate / size
    low, high = int(np.ceil(LOWEST / step)), int(np.floor(HIGHEST / step))
    if high - low < 2:
        return 0.0, 0.0
    peak = low + int(np.argmax(spectrum[low : high + 1]))
    if peak in (low, high):  # the flank of a stronger line outside
        return 0.0, 0.0
    a, b, c = spectrum[peak - 1 : peak + 2]
    offset = 0.5 * (a - c) / (a - 2.0 * b + c) if a - 2.0 * b + c else 0.0
    return (peak + float(offset)) * step, float(b) ** 2 / 2.0 / power


def acquire(
    samples: Floats, at: int, rate: float, confirm: bool
) -> tuple[PhaseTracker, Curve] | None:
    """Look for a fundamental in `samples` (n,), which start at index `at`.

    Args:
        confirm: whether its share of the power, freed of harmonics by the taper, counts as well.
    Returns:
        a tracker that has seen them and the parabola through its points, or None.
    """
    rough, share = coarse(samples, rate)
    need = max(ACQUIRE_SHARE, 40.0 / len(samples))
    if share < need:
        return None
    nu = rough / rate
    for _ in range(2):
        tracker = PhaseTracker(nu, at)
        tracker.extend(samples, at)
        if len(tracker.phase) < 4:
            return None
        points = tracker.positions()
        curve = tracker.curve(points[0], points[-1])
        nu = curve.nu((points[0] + points[-1]) / 2.0)
        if not 0.9 * LOWEST < nu * rate < 1.1 * HIGHEST:
            return None
    level = float(tracker.amplitude.mean())
    if curve.scatter > ACQUIRE_SCATTER or float(tracker.amplitude.std()) > ACQUIRE_RIPPLE * level:
        return None
    if confirm and level**2 / 2.0 < 0.5 * need * float(np.var(samples)):
        return None
    return tracker, curve
