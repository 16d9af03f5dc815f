"""Now: is the circuit all right, and which number is wrong?

A tile per channel: the true RMS large, beside it what an averaging meter would show, the verdict
as a shape and a word, and the figures behind it. Larger terminals get larger digits, trends and
the list of what happened.
"""

import math

import numpy as np

from dsp.verdict import Judgement
from shift import wording
from shift.snapshot import ChannelView, Snapshot, Stage
from tui import digits
from tui.figures import SHAPES, error_words, flag_words, plainly
from tui.lines import Line, beside, fit, rule, wrap
from tui.plot import characters, trace_dots
from tui.screens.page import SMALLEST, View, foot, head, waiting

KEYS = [("1", "Now"), ("2", "Wave"), ("↑↓", "more channels"), ("c", "cautions"), ("?", "help"),
        ("q", "leave")]  # fmt: skip
LEAST_TILE, COMFORTABLE_TILE = 5, 8  # rows
EVENTS_FROM = 34  # rows of terminal from which the list of events is shown
TWO_COLUMNS_FROM = 160  # cells of width from which tiles stand in two columns


def draw(snapshot: Snapshot, view: View, width: int, height: int) -> list[Line]:
    """The page as exactly `height` lines of `width` cells."""
    if width < SMALLEST[0] or height < SMALLEST[1]:
        return _small(snapshot, view, width, height)
    lines = [head(snapshot, view, width)]
    measured = [c for c in snapshot.channels if c.reading is not None]
    if not measured:
        body = waiting(snapshot, width, height - 2)
    else:
        body = _body(snapshot, view, measured, width, height - 2)
    lines += [fit(line, width) for line in body[: height - 2]]
    lines += [fit([], width) for _ in range(height - 1 - len(lines))]
    keys = (
        KEYS
        if len(measured) > _tiles_shown(len(measured), width, height)
        else [key for key in KEYS if key[0] != "↑↓"]
    )
    lines.append(foot(keys, width, snapshot.setup_name))
    return lines


def _columns(width: int) -> int:
    return 2 if width >= TWO_COLUMNS_FROM else 1


def _tiles_shown(count: int, width: int, height: int) -> int:
    room = height - 4 - (_event_rows(height))
    return min(count, max(1, room // LEAST_TILE) * _columns(width))


def _event_rows(height: int) -> int:
    return max(5, height // 5) if height >= EVENTS_FROM else 0


def _body(
    snapshot: Snapshot, view: View, measured: list[ChannelView], width: int, height: int
) -> list[Line]:
    events = _event_rows(height + 2)
    shown = _tiles_shown(len(measured), width, height + 2)
    view.first = max(0, min(view.first, len(measured) - shown))
    tiles = measured[view.first : view.first + shown]
    across = _columns(width) if len(tiles) > 1 else 1
    rows = math.ceil(len(tiles) / across)
    room = height - 2 - events
    tall = max(LEAST_TILE, room // rows)
    each = (width - 2 * (across - 1)) // across
    lines: list[Line] = []
    for r in range(rows):
        drawn = [_tile(c, view, each, tall) for c in tiles[r * across : (r + 1) * across]]
        block = drawn[0]
        for other in drawn[1:]:
            block = beside(block, other, each)
        lines += block
    lines += [[] for _ in range(height - 2 - events - len(lines))]
    if len(measured) > shown:
        last = view.first + shown
        remark = f" channels {view.first + 1} to {last} of {len(measured)}; up and down for more"
        lines[-1] = [(remark, "dim")]
    if events:
        lines += _events(snapshot, view, width, events)
    return lines + _sentence(snapshot, measured, width)


def _tile(channel: ChannelView, view: View, width: int, height: int) -> list[Line]:
    reading = channel.reading
    assert reading is not None
    name, unit = channel.channel.name, channel.channel.unit
    verdict = channel.verdicts[0] if channel.verdicts else None
    judgement = verdict.judgement if verdict is not None else Judgement.UNSURE
    shape = SHAPES[judgement][0 if view.ascii_only else 1]
    state = (f"{shape} {judgement.value}", judgement.value)
    title: Line = [(name, "title"), ("  true RMS", "dim")]
    lines = [rule(title, [state], width, view.ascii_only)]
    number, shown_unit = view.steady.figure(
        f"{name}.rms", reading.rms, reading.u.get("rms", 0.0), unit
    )
    tall = 5 if height >= COMFORTABLE_TILE and width >= 76 else 3
    digit_width = 45 if tall == 5 else 32
    large = digits.large(number, tall, view.ascii_only)
    # Right against the unit, whatever its digits and point take.
    before = " " * max(2, digit_width - 4 - digits.width_of(number, tall))
    left: list[Line] = [[(before + row, "big")] for row in large]
    left[-1] = [*left[-1], (f" {shown_unit}", "title")]
    meter, meter_unit = view.steady.figure(
        f"{name}.averaging", reading.averaging, reading.u.get("averaging", 0.0), unit
    )
    coarse = max(reading.u.get("peak", 0.0), 1e-3 * reading.peak)
    figures = (
        f"crest factor {plainly(reading.crest_factor, 3)}  "
        f"THD-F {plainly(100.0 * reading.thd_f, 1)} %  "
        f"peak {wording.quantity(reading.peak, unit, coarse)}"
    )
    right: list[Line] = [
        [("averaging meter would show ", "dim"), (f"{meter:>8} {meter_unit}", "text")],
        [(error_words(verdict) if verdict is not None else "", judgement.value)],
        [(figures, "text")],
    ]
    flags = flag_words(reading)
    dc = max(reading.u.get("mean", 0.0), 1e-4 * reading.rms)
    mean = f"DC {wording.quantity(reading.mean, unit, dc)}  "
    if math.isfinite(reading.thd_f):
        shown = wording.quantity(reading.fundamental, unit, reading.u.get("fundamental"))
        mean += f"fundamental {shown}  "
    if math.isfinite(reading.firing_angle):
        mean += f"cut at {math.degrees(reading.firing_angle):.1f}°"
    extra: Line = [(flags, "misleads")] if flags else [(mean, "dim")]
    right.append(extra)
    if flags and height > LEAST_TILE + 1:
        right.append([(mean, "dim")])
    block = beside(left, right, digit_width, gap=1)
    room = height - 1 - len(block)
    lines += block
    if room >= 1:
        lines += _trend(channel, view, width, min(room, 14))
    return [fit(line, width) for line in lines[:height]] + [[] for _ in range(height - len(lines))]


def _trend(channel: ChannelView, view: View, width: int, height: int) -> list[Line]:
    """The last minutes of true RMS; nothing when there is no trend yet."""
    trend = channel.trend
    if len(trend.values) < 4 or height < 1:
        return []
    low, high = float(np.nanmin(trend.values)), float(np.nanmax(trend.values))
    # A steady value is drawn steady: a hair's breadth of noise does not fill the plot.
    least = 0.02 * max(abs(high), abs(low), 1e-12)
    if high - low < least:
        middle = (high + low) / 2.0
        low, high = middle - least / 2.0, middle + least / 2.0
    span = float(trend.seconds[-1] - trend.seconds[0])
    label = f"last {wording.duration(span)}"
    unit = channel.channel.unit
    right = 16
    plot_width = max(10, width - right - 4)
    dots = trace_dots(trend.values, low, high, plot_width, height, view.glyphs)
    rows = ["".join(row) for row in characters(dots, view.glyphs).tolist()]
    notes = [""] * height
    notes[0] = wording.quantity(high, unit, (high - low) / 200.0)
    if height > 1:
        notes[-1] = wording.quantity(low, unit, (high - low) / 200.0)
    if height > 2:
        notes[height // 2] = label
    return [
        [("  ", "text"), (row, "trend"), (f" {note}", "dim")]
        for row, note in zip(rows, notes, strict=True)
    ]


def _events(snapshot: Snapshot, view: View, width: int, height: int) -> list[Line]:
    lines = [rule([("what happened", "title")], [], width, view.ascii_only)]
    latest = snapshot.events[-(height - 1) :]
    if not latest:
        lines.append([("  nothing yet", "dim")])
    for event in latest:
        at = wording.duration(event.start + (event.duration or 0.0))
        lines.append([(f"  {at:>12}  ", "dim"), (event.words, "text")])
    return lines + [[] for _ in range(height - len(lines))]


def _sentence(snapshot: Snapshot, measured: list[ChannelView], width: int) -> list[Line]:
    """The worst problem in plain words: two lines."""
    if snapshot.stage in (Stage.WAITING, Stage.FAILED):
        words, meaning = snapshot.words, "misleads"
    else:
        words, meaning = _worst(snapshot, measured)
    lines = wrap(words, width - 2, meaning, 2)
    lines = [[(" ", "text"), *line] for line in lines]
    return lines + [[] for _ in range(2 - len(lines))]


def _worst(snapshot: Snapshot, measured: list[ChannelView]) -> tuple[str, str]:
    misled = [c for c in measured if c.verdicts and c.verdicts[0].judgement is Judgement.MISLEADS]
    if misled:
        worst = max(misled, key=lambda c: abs(c.verdicts[0].error))
        assert worst.reading is not None
        return (
            f"{worst.channel.name}: {wording.disagreement(worst.channel, worst.reading)}",
            "misleads",
        )
    unsure = [c for c in measured if c.verdicts and c.verdicts[0].judgement is Judgement.UNSURE]
    if snapshot.advice:
        return snapshot.advice[-1], "dim"
    if unsure:
        names = ", ".join(c.channel.name for c in unsure)
        return f"Not sure yet whether an averaging meter would mislead on {names}.", "unsure"
    limit = 100.0 * snapshot.limit
    return f"An averaging meter would read right within {limit:g} % on every channel.", "agrees"


def _small(snapshot: Snapshot, view: View, width: int, height: int) -> list[Line]:
    """A line a channel, for a window too small for the page."""
    lines: list[Line] = []
    for channel in snapshot.channels:
        reading = channel.reading
        if reading is None:
            continue
        judgement = channel.verdicts[0].judgement if channel.verdicts else Judgement.UNSURE
        shape = SHAPES[judgement][0 if view.ascii_only else 1]
        rms = wording.quantity(reading.rms, channel.channel.unit, reading.u.get("rms"))
        lines.append(
            [
                (f"{channel.channel.name[:12]:<12} ", "text"),
                (f"{rms:>10} ", "big"),
                (f"{shape} {judgement.value}", judgement.value),
            ]
        )
    if not lines:
        lines = [[(snapshot.words, "text")]]
    lines = lines[: max(0, height - 1)]
    lines += [[] for _ in range(height - 1 - len(lines))]
    lines.append([("tiles only: needs 80x24", "dim")])
    return [fit(line, width) for line in lines[:height]]
