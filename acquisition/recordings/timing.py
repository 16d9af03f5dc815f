"""What the time column of a table tells: the rate, and where samples are missing.

Times as printed are rounded, sometimes so coarsely that many lines share one. The rate comes from
a span of many lines, never from one step.
"""

import math
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

GAP_STEPS = 1.5  # a step of so many usual ones is a gap
MOST_LOST = 2**53  # sets; beyond, the times are nonsense and the loss is unknown
UNEVEN = 0.6  # of a step off the straight line, before it is worth a word
DAY = 86400.0  # s
FIRST_STEPS = 1000  # lines by which the usual step is known
OTHER_STEP = 0.01  # relative: a step that changes by more for good is another rate
FOR_GOOD = 100  # lines


@dataclass(frozen=True, slots=True)
class Timing:
    """How lines follow each other in time. Times in s, or in sample numbers with a step of 1."""

    step: float  # between samples
    slack: float = 0.0  # s a step may be longer by: how coarsely times are printed, if coarse
    scatter: float = 0.0  # s a step was seen to be off the usual one
    span: float = 0.0  # s it was found from
    note: str = ""

    @property
    def exact(self) -> bool:
        """Whether the steps are all one, so that more lines would tell nothing more."""
        return self.slack == 0.0 and self.scatter <= 1e-6 * self.step

    @property
    def rate(self) -> float:
        """Sets a second, made whole where the times cannot tell it from a whole number."""
        rate = 1.0 / self.step
        doubt = max(1e-9, 2.0 * self.scatter / max(self.span, self.step)) * rate
        whole = round(rate)
        if whole > 0 and abs(rate - whole) <= min(doubt, 0.02 * rate):
            return float(whole)
        return rate


def find_timing(times: Floats) -> Timing | None:
    """From the times of the first lines; None when they tell no rate."""
    steps = np.diff(times)
    steps = steps[np.isfinite(steps)]
    if not len(steps) or not (steps > 0.0).any():
        return None
    begin = steps[:FIRST_STEPS]
    usual = float(np.partition(begin, (len(begin) - 1) // 2)[(len(begin) - 1) // 2])
    if usual > 0.0 and _steady(begin, usual):
        even = steps[_about(steps, usual)]
        span = float(even.sum())
        step = span / len(even)
        # Times far from 0 are rounded by the floating point itself.
        grain = 4.0 * float(np.spacing(np.abs(times).max()))
        off = float(np.abs(even - step).max())
        scatter = off if off > grain + 1e-9 * step else 0.0
        return Timing(step, 0.0, scatter, span, _uneven(times, step))
    return _coarse(times, steps)


def _steady(steps: Floats, usual: float) -> bool:
    """Whether most steps are the usual one, and the others gaps of whole steps."""
    ratio = steps / usual
    near = _about(steps, usual) | ((ratio > 1.0) & (np.abs(ratio - np.rint(ratio)) < 0.25))
    return bool(
        np.count_nonzero(near) >= 0.9 * len(steps)
        and np.count_nonzero(_about(steps, usual)) >= 0.5 * len(steps)
    )


def _about(steps: Floats, usual: float) -> npt.NDArray[np.bool_]:
    return (steps > 0.5 * usual) & (steps < GAP_STEPS * usual)


def _uneven(times: Floats, step: float) -> str:
    """A sentence when the first stretch without a gap wanders off a straight line."""
    steps = np.diff(times)
    gaps = np.flatnonzero(~((steps > 0.0) & (steps < GAP_STEPS * step)))
    stretch = times[: int(gaps[0]) + 1] if len(gaps) else times
    if len(stretch) < 3:
        return ""
    off = stretch - stretch[0] - step * np.arange(len(stretch))
    worst = float(off.max() - off.min()) / step / 2.0
    if worst <= UNEVEN:
        return ""
    return f"Times are uneven, by up to {worst:.1f} steps; an even rate is used."


def _coarse(times: Floats, steps: Floats) -> Timing | None:
    """Many lines share a time, or come in bursts: only a span tells.

    From where one time begins to where another does, the lines are known to within one.
    """
    begins = np.flatnonzero(np.diff(times) > 0.0) + 1
    a, b = (int(begins[0]), int(begins[-1])) if len(begins) > 2 else (0, len(times) - 1)
    span = float(times[b] - times[a])
    if span <= 0.0:
        return None
    step = span / (b - a)
    grain = float(np.percentile(steps[steps > 0.0], 95))
    note = (
        f"Times are coarse, {grain:g} s at a time; the rate was taken from their span,"
        f" and a gap shows only beyond {round(GAP_STEPS * grain / step)} sets."
    )
    return Timing(step, GAP_STEPS * grain, step if len(begins) > 2 else grain, span, note)


def refined(timing: Timing, lines: int, first: float, last: float) -> Timing:
    """The same from the whole file, when its lines and its span agree: then nothing is missing."""
    span = last - first
    if not (math.isfinite(span) and span > timing.span) or lines < 2:
        return timing
    # The last time is known only as finely as times are printed.
    grain = max(timing.scatter, timing.slack / GAP_STEPS)
    doubt, better = 2.0 * timing.scatter / timing.span + 1e-6, grain / span
    if better >= doubt or abs(span / timing.step / (lines - 1) - 1.0) > doubt + better:
        return timing
    return Timing(span / (lines - 1), timing.slack, grain, span, timing.note)


def undisturbed(timing: Timing, times: Floats, before: float | None) -> bool:
    """Whether these lines plainly follow each other at the usual step: a quick look.

    Args:
        times: of lines that follow each other, (n,), n >= 1.
        before: time of the line before them; None: there is none.
    """
    step = timing.step
    if before is not None and not abs(times[0] - before - step) < 0.4 * step:
        return False
    if len(times) < 2:
        return True
    steps = np.diff(times)
    mean = float(times[-1] - times[0]) / (len(times) - 1)
    return bool(
        steps.min() > 0.6 * step
        and steps.max() < 1.4 * step
        and abs(mean - step) < OTHER_STEP * step
    )


def missing(timing: Timing, times: Floats, before: float | None) -> npt.NDArray[np.int64]:
    """Sets missing before each line; -1 where time runs backwards (unknown).

    Args:
        times: of lines that follow each other, (n,).
        before: time of the line before them; None: there is none.
    """
    steps = np.diff(times, prepend=times[0] - timing.step if before is None else before)
    steps /= timing.step
    slack = timing.slack / timing.step
    lost = np.zeros(len(steps), np.int64)
    late = np.flatnonzero(steps >= GAP_STEPS + slack)
    if len(late):
        jumps = np.minimum(np.rint(steps[late]) - 1.0 - round(slack / GAP_STEPS), MOST_LOST)
        lost[late] = np.where(jumps >= MOST_LOST, -1.0, np.maximum(jumps, 1.0)).astype(np.int64)
    lost[steps <= -0.5 - slack] = -1
    return lost


def other_step(timing: Timing, times: Floats) -> tuple[int, float] | None:
    """Where these lines go over to another step for good, and to which; None when they do not."""
    if timing.slack > 0.0 or len(times) < FOR_GOOD:
        return None
    steps = np.diff(times)
    usual = np.flatnonzero(_about(steps, timing.step))
    edges = np.concatenate(([-1], usual, [len(steps)]))
    runs = np.diff(edges) - 1
    if int(runs.max()) >= FOR_GOOD:
        at = int(edges[int(np.argmax(runs))]) + 1
        step = float(np.median(steps[at : at + FOR_GOOD]))
        return (at, step) if step > 0.0 else None
    step = float(np.median(steps))
    doubt = OTHER_STEP * timing.step + 2.0 * timing.scatter
    if abs(step - timing.step) <= doubt or step <= 0.0:
        return None
    steady = np.abs(steps - step) <= doubt
    return (0, step) if np.count_nonzero(steady) > 0.9 * len(steps) else None


# -- times as text -------------------------------------------------------------------------------


def stamps(texts: list[str], origin: datetime | None) -> tuple[Floats, datetime | None]:
    """ISO 8601 stamps to seconds since `origin` (None: since the first); NaN where none."""
    texts = [text.replace(",", ".") for text in texts]
    if origin is None:
        origin = next((moment for text in texts if (moment := _moment(text)) is not None), None)
    if origin is None:
        return np.full(len(texts), np.nan), None
    zone = _zone(texts[0])
    quick = [text[: len(text) - len(zone)] for text in texts if zone == "" or text.endswith(zone)]
    if len(quick) == len(texts):
        zero = _moment("1970-01-01T00:00:00" + zone)
        try:
            since = np.array(quick, "datetime64[ns]").astype(np.int64)
        except (ValueError, OverflowError):
            zero = None
        if zero is not None:
            whole = round((origin - zero).total_seconds() * 1e6) * 1000
            seconds = (since - whole) / 1e9
            seconds[since == np.iinfo(np.int64).min] = np.nan
            return seconds, origin
    moments = [_moment(text) for text in texts]
    return (
        np.array([math.nan if m is None else (m - origin).total_seconds() for m in moments]),
        origin,
    )


def _zone(text: str) -> str:
    if text.endswith("Z"):
        return "Z"
    return text[-6:] if len(text) > 20 and text[-6] in "+-" and text[-3] == ":" else ""


def _moment(text: str) -> datetime | None:
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        return None
    return moment if moment.tzinfo is not None else moment.replace(tzinfo=UTC)


def clocks(texts: list[str], before: float | None) -> Floats:
    """Times of day to seconds, running on past midnight; NaN where none.

    Args:
        before: the last time of the lines before, already running on.
    """
    seconds = np.array([_seconds(text) for text in texts])
    known = np.isfinite(seconds)
    if not known.any():
        return seconds
    values = seconds[known]
    days = math.floor(before / DAY) if before is not None else 0
    steps = np.diff(values, prepend=values[0] if before is None else before - days * DAY)
    seconds[known] = values + DAY * (days + np.cumsum(steps < -DAY / 2))
    return seconds


def _seconds(text: str) -> float:
    parts = text.replace(",", ".").split(":")
    try:
        hours, minutes, seconds = int(parts[0]), int(parts[1]), float(parts[2])
    except (ValueError, IndexError):
        return math.nan
    return hours * 3600.0 + minutes * 60.0 + seconds
