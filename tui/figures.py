"""Figures as the screen shows them: fixed width, no digit that is not known, no jumping about."""

import math

from dsp.reading import Reading
from dsp.verdict import Judgement, Verdict

# A state is a shape and a word, so that it needs no colour.
SHAPES = {
    Judgement.AGREES: ("=", "≈"),
    Judgement.MISLEADS: ("X", "▲"),
    Judgement.UNSURE: ("?", "○"),
}
_PREFIXES = ((1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"))
_PREFIXED = ("V", "A", "W", "VA", "var")


class Steady:
    """Chooses prefix and decimal places for a figure and keeps them while they still fit.

    Fewer digits are shown at once when the uncertainty grows; more only when it has shrunk well
    below what they need, so that a figure at the border does not change its width every window.
    """

    def __init__(self) -> None:
        self._kept: dict[str, tuple[float, str, int]] = {}

    def figure(
        self, key: str, value: float, u: float, unit: str, digits: int = 6
    ) -> tuple[str, str]:
        """(number, unit) of a value with standard uncertainty `u`; at most `digits` digits."""
        if not math.isfinite(value):
            return "-", unit
        factor, prefix = self._prefix(key, value, unit)
        scaled, spread = value / factor, (u if math.isfinite(u) and u > 0.0 else 0.0) / factor
        wanted = places(scaled, spread, digits)
        kept = self._kept.get(key)
        if kept is not None and kept[0] == factor:
            held = kept[2]
            if wanted > held and spread and places(scaled, 2.0 * spread, digits) <= held:
                wanted = held
        self._kept[key] = (factor, prefix, wanted)
        return f"{scaled:.{wanted}f}", prefix + unit

    def _prefix(self, key: str, value: float, unit: str) -> tuple[float, str]:
        if unit not in _PREFIXED:
            return 1.0, ""
        size = abs(value)
        kept = self._kept.get(key)
        if kept is not None and (0.5 * kept[0] <= size < 1500.0 * kept[0] or size == 0.0):
            return kept[0], kept[1]
        for factor, prefix in _PREFIXES:
            if size >= factor:
                return factor, prefix
        return (1e-3, "m") if size > 0.0 and unit in ("V", "A") else (1.0, "")


def places(value: float, u: float, digits: int = 6) -> int:
    """Decimal places: the last about the size of `u`, never over `digits` digits in all."""
    whole = len(str(int(abs(value))))
    room = max(0, digits - whole)
    if u <= 0.0:
        return min(room, 3)
    return min(room, max(0, -math.floor(math.log10(2.0 * u))))


def plainly(value: float, decimals: int, unit: str = "") -> str:
    """A figure with given decimals; a dash where there is none."""
    if not math.isfinite(value):
        return "-"
    return f"{value:.{decimals}f}{' ' + unit if unit else ''}"


def error_words(verdict: Verdict) -> str:
    """How far off a meter would be: "17.4 % low ± 1.2 %"."""
    if not math.isfinite(verdict.error):
        return "nothing to compare"
    size, u = 100.0 * abs(verdict.error), 100.0 * verdict.u_error
    decimals = min(2, places(size, u)) if u > 0 else 2
    if round(size, decimals) == 0.0:
        return f"no difference ± {2.0 * u:.{max(decimals, 2)}f} %"
    side = "low" if verdict.error < 0 else "high"
    return f"{size:.{decimals}f} % {side} ± {2.0 * u:.{decimals}f} %"


def flag_words(reading: Reading) -> str:
    """What is to be said of a reading, in words."""
    words = {
        "clipped": "CLIPPED: figures are lower bounds",
        "gap": "after a gap",
        "edge": "short window",
        "low-signal": "signal too small to judge",
        "unlocked": "no steady frequency",
    }
    return ", ".join(words[flag] for flag in reading.flags.words())
