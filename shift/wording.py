"""The sentences a person reads, the same on screen, in logs and in the report."""

import math

from dsp.reading import Reading
from dsp.verdict import Judgement, Verdict
from dsp.waveform import Channel

CAUTION_TITLE = "Before you connect anything"

# The usual cautions of the trade; local codes and licensed practice come before every one of them.
CAUTIONS: tuple[str, ...] = (
    "Local codes and licensed practice come first. Work live only where they allow it, and only if "
    "you are qualified for it.",
    "A reading is no proof of dead: 0 V on this screen never means that a conductor is dead. Prove "
    "it with an approved two-pole indicator, tested on a live source before and after.",
    "A homemade front end has no measurement category. Bring mains in only through a certified "
    "isolating transformer, isolation amplifier or rated probe; never through a bare divider to "
    "USB ground.",
    "Rating means voltage and category: CAT II for plugged-in loads, CAT III for building "
    "distribution, panels and dimmer racks, CAT IV at the source of the installation. The weakest "
    "part of the chain governs.",
    "Use fused leads with finger guards and little bare metal at the tip.",
    "Never open the secondary of a current transformer under load: short it first.",
    "A neutral may carry current with one phase off.",
)


def quantity(value: float, unit: str, u: float | None = None) -> str:
    """A figure with its unit, no more digits than `u` supports: "230.04 V", "1.2 kA".

    Args:
        value: in `unit`. NaN gives "no reading".
        u: standard uncertainty in `unit`; None or 0 gives four significant digits.
    """
    if not math.isfinite(value):
        return "no reading"
    prefix, factor = _prefix(value, unit)
    scaled = value / factor
    places = _places(scaled, None if not u or not math.isfinite(u) else u / factor)
    return f"{scaled:.{places}f} {prefix}{unit}".rstrip()


def percent(fraction: float, u: float | None = None) -> str:
    """A fraction as percent with sensible digits, "36.2 %". NaN gives "no figure"."""
    if not math.isfinite(fraction):
        return "no figure"
    places = 1 if abs(fraction) >= 0.01 else 2
    if u and math.isfinite(u):
        places = min(2, _places(100.0 * fraction, 100.0 * u))
    return f"{100.0 * fraction:.{places}f} %"


def disagreement(channel: Channel, reading: Reading) -> str:
    """What a mean-responding meter would show here against the truth, as one or two sentences."""
    if not math.isfinite(reading.averaging_error):
        return f"{channel.name}: the signal is too small to compare meters."
    shown = quantity(reading.averaging, channel.unit, reading.u.get("averaging"))
    true = quantity(reading.rms, channel.unit, reading.u.get("rms"))
    error = reading.averaging_error
    if abs(error) < 0.0005:
        return f"A mean-responding meter would show {shown} here, and it is {true}: they agree."
    side = "low" if error < 0 else "high"
    amount = percent(abs(error), reading.u.get("averaging_error"))
    return f"A mean-responding meter would show {shown} here. It is {true}: {amount} {side}."


def judgement_words(verdict: Verdict) -> str:
    """The verdict on one meter card in a few words, with how far off and how sure."""
    if verdict.judgement is Judgement.UNSURE and not math.isfinite(verdict.error):
        return "no reading to compare"
    error, u = 100.0 * verdict.error, 100.0 * verdict.u_error
    places = min(2, _places(error, u))
    return f"{verdict.judgement.value} ({error:+.{places}f} % ± {2.0 * u:.{places}f} %)"


def duration(seconds: float) -> str:
    """A length of time as a technician says it: "0.110 s", "12.4 s", "3 min 05 s", "2 h 10 min"."""
    if not math.isfinite(seconds):
        return "unknown time"
    if seconds < 1.0:
        return f"{seconds:.3f} s"
    if seconds < 60.0:
        return f"{seconds:.1f} s"
    minutes, rest = divmod(round(seconds), 60)
    if minutes < 60:
        return f"{minutes} min {rest:02d} s"
    hours, minutes = divmod(minutes, 60)
    return f"{hours} h {minutes:02d} min"


def misleads_begins(channel: Channel, reading: Reading) -> str:
    """Sentence for the moment from which an averaging meter misleads."""
    shown = quantity(reading.averaging, channel.unit, reading.u.get("averaging"))
    true = quantity(reading.rms, channel.unit, reading.u.get("rms"))
    error = reading.averaging_error
    side = "low" if error < 0 else "high"
    amount = percent(abs(error), reading.u.get("averaging_error"))
    return (
        f"{channel.name}: an averaging meter misleads from here: {shown} instead of {true}, "
        f"{amount} {side}."
    )


def misleads_ends(channel: Channel, worst: float, seconds: float) -> str:
    """Sentence for the end of such a stretch; `worst` is the largest error met, as a fraction."""
    side = "low" if worst < 0 else "high"
    return (
        f"{channel.name}: an averaging meter misled for {duration(seconds)}, "
        f"at worst {percent(abs(worst))} {side}."
    )


def clipped_begins(channel: Channel) -> str:
    """Sentence for samples stuck at a rail."""
    return (
        f"{channel.name}: the converter is clipped; RMS, peak and crest factor are lower bounds. "
        "Lower the input or widen its range."
    )


def clipped_ends(channel: Channel, seconds: float) -> str:
    """Sentence for the end of clipping."""
    return f"{channel.name}: was clipped for {duration(seconds)}."


_WORDS = {"dip": "dips", "swell": "swells", "interruption": "is interrupted"}


def excursion_begins(channel: Channel, kind: str, value: float) -> str:
    """Sentence for a voltage that leaves its band."""
    return f"{channel.name} {_WORDS[kind]}: {quantity(value, channel.unit)} over one cycle."


def excursion_ends(channel: Channel, kind: str, worst: float, share: float, seconds: float) -> str:
    """Sentence for its return; `share` of the reference is what was left, or reached."""
    value = quantity(worst, channel.unit)
    what = "at most" if kind == "swell" else "down to"
    noun = "an interruption" if kind == "interruption" else f"a {kind}"
    left = f"{what} {value} ({100.0 * share:.1f} %)"
    return f"{channel.name} is back: {noun} of {duration(seconds)}, {left}."


def stream_returns(seconds: float) -> str:
    """Sentence for a source that is back."""
    return f"The source is back after {duration(seconds)}; the watch goes on."


def gap(lost: int | None, seconds: float | None) -> str:
    """Sentence for missing samples. `lost` sets; None where the format cannot tell."""
    if lost is None or seconds is None:
        return "Samples are missing here; this format cannot tell how many."
    return f"{lost} samples of every channel are missing here ({duration(seconds)})."


def gap_ends(lost: float | None, places: int, seconds: float) -> str:
    """Sentence once samples come without a break again."""
    where = "in one place" if places == 1 else f"in {places} places over {duration(seconds)}"
    if lost is None:
        return f"Samples come without a break again; an unknown number is missing {where}."
    return f"Samples come without a break again; {lost:.0f} of every channel are missing {where}."


def _prefix(value: float, unit: str) -> tuple[str, float]:
    if unit not in ("V", "A", "W", "VA", "var"):
        return "", 1.0
    size = abs(value)
    if size >= 9999.5:
        return ("M", 1e6) if size >= 9999.5e3 else ("k", 1e3)
    if 0.0 < size < 0.09995 and unit in ("V", "A"):
        return "m", 1e-3
    return "", 1.0


def _places(value: float, u: float | None) -> int:
    """Decimal places so that the last digit shown is about one standard uncertainty."""
    if u:
        return min(6, max(0, -math.floor(math.log10(2.0 * u))))
    if value == 0.0:
        return 1
    return min(6, max(0, 3 - math.floor(math.log10(abs(value)))))
