"""What format is this: framed, text or raw, by looking at bytes. Never sure and wrong.

Framed is proved by its sums, text by lines that share one shape; raw words can only be made
likely: their high bytes are calm and each channel moves in small steps. Where two readings fit,
or the input does nothing, the answer says so in `ambiguous`.

Thresholds were tuned on generated streams; tests/acquisition/test_sniff.py tries others.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from acquisition.wire.crestwire import CrestwireDecoder
from acquisition.wire.text import TextDecoder
from acquisition.wire.text_shape import TextShape, learn

FRAMES = 3  # good sums that prove the framed format
PRINTABLE = 0.9
TEXT_LINES = 5  # whole lines between the first and the last
TEXT_LOOK = 256  # lines looked at, for speed
RAW_SKIP = 512  # bytes; boot text or a cut unit
RAW_LEAST = 256  # bytes after that
RAW_WORDS = 16384  # looked at
CHANNELS_MOST = 8
FEWEST = 1.3  # of the best score: fewer channels win if not worse than this
SIGNED_GAIN = 0.98  # signed only if more than 2 % smoother
REFUSE = 0.75  # steps this large against shuffled words are no signal
FEW_SAMPLES = 0.25  # a sine of 20 samples a cycle: 1.571 sin(pi / 20), closed form
UNEVEN = 0.6  # steps at one phase this small against another: channels that are equal
ORDER_MARGIN = 1.015  # the other byte order must be rougher by this much; wrong picks had < 1.0099
CLEAR_ENTROPY = 0.1  # bits between high and low bytes, to be sure which is which
IDLE_SPREAD = 8.0  # codes, standard deviation


@dataclass(frozen=True, slots=True)
class Identification:
    """What a stream was taken for, and why."""

    format: str | None  # "crestwire", "text", "raw"; None: no stream of samples known here
    channels: int = 0
    sample_type: str = ""  # "u16", "i16", … or "text"
    byte_order: str = ""
    confidence: float = 0.0  # 0..1
    ambiguous: tuple[str, ...] = ()  # what else it may be, as sentences
    reasons: tuple[str, ...] = ()
    rate: float | None = None  # sets a second, when the stream tells
    offset: int = 0  # raw: bytes before the first whole word


def identify(data: bytes) -> Identification:
    """Identify a stream from its bytes, from about 0.1 s of them on."""
    found = _framed(data) or _text(data)
    if found is not None:
        return found
    return _raw(data)


def describe_bytes(data: bytes, limit: int = 24) -> str:
    """The first bytes in a sentence, printable."""
    head = data[:limit]
    if head and _printable(head) > PRINTABLE:
        return '"' + "".join(chr(b) if 32 <= b < 127 else "·" for b in head) + '"'
    return " ".join(f"{b:02x}" for b in head[: limit // 2])


def _framed(data: bytes) -> Identification | None:
    decoder = CrestwireDecoder()
    decoder.feed(data, 0.0)
    good = decoder.frames
    if good < FRAMES:
        return None
    decoder.finish()
    info = decoder.info
    if info is None:
        return None
    tally = decoder.tally
    reasons = [f"{good} frames with a good CRC-32"]
    if tally.bad_frames:
        reasons.append(f"{tally.bad_frames} units refused")
    reasons.append("it names its rate" if info.rate else "no HELLO seen yet, so no rate")
    return Identification(
        "crestwire",
        len(info.channels),
        info.sample_type,
        "little",
        1.0,
        reasons=tuple(reasons),
        rate=info.rate,
    )


def _text(data: bytes) -> Identification | None:
    if _printable(data) <= PRINTABLE:
        return None
    lines = data.replace(b"\r", b"\n").split(b"\n")[1:-1]
    lines = [line for line in lines if line.strip()]
    if len(lines) > TEXT_LOOK:
        lines = lines[:40] + lines[40 - TEXT_LOOK :]
    if len(lines) < TEXT_LINES:
        return None
    shape = learn(lines)
    if shape is None:
        return None
    decoder = TextDecoder()
    decoder.feed(data, 0.0)
    decoder.finish()
    rate = decoder.info.rate if decoder.info is not None else None
    if decoder.shape is not None:
        shape = decoder.shape
    ambiguous = list(shape.notes)
    if _may_be_decimal_comma(lines, shape):
        ambiguous.append("every comma may also be a decimal sign, with half as many channels")
    return Identification(
        "text",
        shape.channels,
        "text",
        "",
        0.98 if not ambiguous else 0.6,
        tuple(ambiguous),
        (f"lines of {shape.fields} numbers, {_separated(shape)}",),
        rate,
    )


def _separated(shape: TextShape) -> str:
    if shape.around:
        return "each with its name" if shape.names else "between fixed words"
    words = {b",": "commas", b";": "semicolons", b"\t": "tabs", b" ": "spaces", b"|": "bars"}
    return f"separated by {words.get(shape.separator, 'colons or slashes')}" + (
        ", decimal commas" if shape.decimal_comma else ""
    )


def _may_be_decimal_comma(lines: list[bytes], shape: TextShape) -> bool:
    """`3,14,2,71`: every second field of one width, and that width 2 or more."""
    if shape.separator != b"," or shape.fields % 2 or not shape.integer:
        return False
    if any(b", " in line for line in lines):
        return False
    widths = {len(part) for line in lines for part in line.strip().split(b",")[1::2]}
    wholes = {int(part) for line in lines for part in line.split(b",")[0::2] if _short(part)}
    leading = any(part[:1] == b"0" for line in lines for part in line.strip().split(b",")[1::2])
    return len(widths) == 1 and min(widths) >= 2 and leading and len(wholes) > 0


def _short(part: bytes) -> bool:
    return part.strip().lstrip(b"+-").isdigit() and len(part) < 10


def _printable(data: bytes) -> float:
    if not data:
        return 0.0
    octets = np.frombuffer(data, np.uint8)
    good = ((octets >= 32) & (octets < 127)) | ((octets >= 9) & (octets <= 13))
    return float(np.count_nonzero(good)) / len(octets)


def _raw(data: bytes) -> Identification:
    skip = RAW_SKIP if len(data) >= RAW_SKIP + RAW_LEAST else 0
    octets = np.frombuffer(data, np.uint8)[skip:]
    if len(octets) < RAW_LEAST:
        return Identification(None, reasons=(f"only {len(data)} bytes came",))
    octets = octets[: 2 * RAW_WORDS + 2]
    entropy = (_entropy(octets[0::2]), _entropy(octets[1::2]))
    high = 0 if entropy[0] < entropy[1] else 1  # where the calmer bytes lie
    best = _best_raw(octets, high)
    score, shuffled, order, kind, channels, words, margin = best
    calm = min(entropy)
    spread = float(
        np.std(words[: len(words) // channels * channels].reshape(-1, channels), axis=0).max()
    )
    told = f"{channels} channel{'s' if channels > 1 else ''} of {kind}, {order}-endian"
    if spread == 0.0 or (spread < IDLE_SPREAD and calm < 2.0):
        return Identification(
            "raw",
            channels,
            kind,
            order,
            0.1,
            ("the inputs do nothing, so channels, type and byte order cannot be told",),
            (f"words of 16 bits fit; as far as one can see {told}",),
            offset=_offset(skip, high, order),
        )
    ratio = score / shuffled if shuffled else 1.0
    if ratio > REFUSE or abs(entropy[0] - entropy[1]) < 0.05:
        return Identification(
            None,
            reasons=(
                "no framed unit, no lines of numbers, and as 16-bit words no channel moves in"
                f" small steps (steps are {ratio:.0%} of shuffled ones)",
            ),
        )
    ambiguous = []
    if ratio > FEW_SAMPLES:
        ambiguous.append(
            "there may be fewer than 20 samples in a mains cycle; then the number of channels"
            " cannot be told"
        )
    if margin < ORDER_MARGIN or abs(entropy[0] - entropy[1]) < CLEAR_ENTROPY:
        ambiguous.append(
            "the other byte order fits about as well; with all 16 bits in use it cannot be told"
        )
    doubled = _equal_channels(words, channels)
    if doubled:
        ambiguous.append(f"it may be {doubled} channels, some with the same signal")
    return Identification(
        "raw",
        channels,
        kind,
        order,
        0.4 if ambiguous else 0.9,
        tuple(ambiguous),
        (
            f"as {told}, samples move in steps {ratio:.1%} of shuffled ones",
            "raw words carry no proof: confirm channels, their order and the baud rate",
        ),
        offset=_offset(skip, high, order),
    )


def _offset(skip: int, high: int, order: str) -> int:
    """Parity of the first byte of a word, counted from the stream's start."""
    begin = high if order == "big" else 1 - high
    return (skip + begin) % 2


def _best_raw(
    octets: npt.NDArray[np.uint8], high: int
) -> tuple[float, float, str, str, int, npt.NDArray[np.int64], float]:
    """The likeliest reading: score, shuffled score, byte order, type, channels, words.

    And how much rougher it is in the other byte order.
    """
    readings = []
    for order in ("little", "big"):
        begin = high if order == "big" else 1 - high
        usable = (len(octets) - begin) // 2 * 2
        raw = octets[begin : begin + usable].tobytes()
        for kind, code in (("u16", "u2"), ("i16", "i2")):
            words = np.frombuffer(raw, ("<" if order == "little" else ">") + code).astype(np.int64)
            scores = [_roughness(words, channels) for channels in range(1, CHANNELS_MOST + 1)]
            readings.append((order, kind, words, scores))
    # Unsigned unless signed is clearly smoother, in each byte order.
    kept = []
    for unsigned, signed in (readings[0:2], readings[2:4]):
        better = min(signed[3]) < SIGNED_GAIN * min(unsigned[3])
        kept.append(signed if better else unsigned)
    order, kind, words, scores = min(kept, key=lambda reading: min(reading[3]))
    least = min(scores)
    channels = next(c for c, s in enumerate(scores, 1) if s <= FEWEST * least)
    mixed = np.random.default_rng(0).permutation(words)
    other = max(min(reading[3]) for reading in kept)
    margin = other / least if least else 1.0
    return scores[channels - 1], _roughness(mixed, 1), order, kind, channels, words, margin


def _roughness(words: npt.NDArray[np.int64], channels: int) -> float:
    """Mean step of a channel, from one of its samples to its next. [codes]"""
    if len(words) <= channels:
        return float("inf")
    return float(np.abs(words[channels:] - words[:-channels]).mean())


def _equal_channels(words: npt.NDArray[np.int64], channels: int) -> int | None:
    """A multiple of `channels` at which steps come out uneven: equal inputs look like fewer."""
    steps = np.abs(words[channels:] - words[:-channels])
    for times in range(2, CHANNELS_MOST // channels + 1):
        period = channels * times
        whole = len(steps) // period * period
        phases = steps[:whole].reshape(-1, times, channels).mean(axis=(0, 2))
        if phases.min() < UNEVEN * phases.max():
            return period
    return None


def _entropy(octets: npt.NDArray[np.uint8]) -> float:
    """Shannon entropy of byte values. [bits]"""
    counts = np.bincount(octets, minlength=256)
    share = counts[counts > 0] / len(octets)
    return float(-(share * np.log2(share)).sum())
