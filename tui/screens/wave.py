"""Wave: what does it look like, and why do two meters disagree?

The trace of one window from its upward zero crossing on, with the true RMS, what an averaging
meter would show, and the peaks drawn on it as levels; below it the harmonics.
"""

import math
import re

import numpy as np

from dsp.reading import Reading
from shift import wording
from shift.snapshot import ChannelView, Snapshot
from tui.lines import Line, beside, fit, rule, wrap
from tui.plot import bars, characters, row_of, ticks, trace_dots
from tui.screens.page import SMALLEST, View, foot, head, waiting

KEYS = [("1", "Now"), ("2", "Wave"), ("←→", "channel"), ("+-", "cycles"), ("space", "freeze"),
        ("?", "help"), ("q", "leave")]  # fmt: skip
AXIS = 9  # cells of the scale on the left
LABELS = 30  # cells of the level names on the right
_RUNS = re.compile(" +|[^ ]+")
TWO_TRACES_FROM = 46  # rows of terminal


def draw(snapshot: Snapshot, view: View, width: int, height: int) -> list[Line]:
    """The page as exactly `height` lines of `width` cells."""
    lines = [head(snapshot, view, width)]
    measured = [c for c in snapshot.channels if c.reading is not None]
    if not measured or snapshot.window is None:
        body = waiting(snapshot, width, height - 2)
    elif width < SMALLEST[0] or height < SMALLEST[1]:
        body = [[(f"Wave needs {SMALLEST[0]}x{SMALLEST[1]}; here are {width}x{height}", "dim")]]
    else:
        view.channel %= len(measured)
        body = _body(snapshot, view, measured, width, height - 2)
    lines += [fit(line, width) for line in body[: max(0, height - 2)]]
    lines += [fit([], width) for _ in range(height - 1 - len(lines))]
    lines.append(foot(KEYS, width, snapshot.setup_name))
    return lines[:height]


def _body(
    snapshot: Snapshot, view: View, measured: list[ChannelView], width: int, height: int
) -> list[Line]:
    tabs: Line = [(" ", "text")]
    for k, channel in enumerate(measured):
        here = k == view.channel
        mark = (">" if view.ascii_only else "▸") if here else " "
        tabs.append((f"{mark}{channel.channel.name}  ", "here" if here else "dim"))
    chosen = measured[view.channel]
    reading = chosen.reading
    assert reading is not None
    words = wording.disagreement(chosen.channel, reading)
    judgement = chosen.verdicts[0].judgement.value if chosen.verdicts else "unsure"
    lines = [tabs]
    lines += [[(" ", "text"), *row] for row in wrap(words, width - 2, judgement, 1)]
    two = height + 2 >= TWO_TRACES_FROM and len(measured) > 1
    spectrum = max(7, height // 4)
    room = height - len(lines) - spectrum
    if two:
        other = measured[(view.channel + 1) % len(measured)]
        lines += _trace(snapshot, view, chosen, width, room - room // 2, "trace")
        lines += _trace(snapshot, view, other, width, room // 2, "second")
    else:
        lines += _trace(snapshot, view, chosen, width, room, "trace")
    return lines + _spectrum(chosen, view, width, spectrum)


def _trace(
    snapshot: Snapshot, view: View, channel: ChannelView, width: int, height: int, meaning: str
) -> list[Line]:
    reading, window = channel.reading, snapshot.window
    assert reading is not None
    assert window is not None
    k = next(k for k, c in enumerate(snapshot.channels) if c.channel.name == channel.channel.name)
    begin = window.begin - window.first
    length = window.end - window.begin
    cycles = window.cycles or 0
    if cycles:
        length *= min(view.cycles, cycles) / cycles
    n = window.samples.shape[1]
    at = np.linspace(begin, min(begin + length, n - 1.0), max(2, min(2000, int(length) + 1)))
    samples = np.interp(at, np.arange(n), window.samples[k])
    peak = max(reading.peak, abs(reading.rms), 1e-12)
    low, high = -1.08 * peak, 1.08 * peak
    plot_width = width - AXIS - LABELS
    rows = height - 2  # title above, time below
    dots = trace_dots(samples, low, high, plot_width, rows, view.glyphs)
    chars = characters(dots, view.glyphs)
    marks, labels = _levels(channel, reading, low, high, rows, view.ascii_only)
    scale = _scale(low, high, rows, channel.channel.unit)
    dash = "-" if view.ascii_only else "╌"
    title = f"{channel.channel.name}, {_shown(view, window.cycles)}"
    lines = [rule([(title, "title")], [], width, view.ascii_only)]
    zero = row_of(0.0, low, high, rows)
    for y in range(rows):
        line: Line = [(f"{scale.get(y, ''):>{AXIS - 1}} ", "dim")]
        under = marks.get(y) or ("dim" if y == zero else "")
        for found in _RUNS.finditer("".join(chars[y].tolist())):
            run = found[0]
            if run[0] != " ":
                line.append((run, meaning))
            elif under:
                line.append((dash * len(run), under))
            else:
                line.append((run, "text"))
        if y in labels:
            line.append((f" {labels[y][0]}", labels[y][1]))
        lines.append(line)
    span = 1000.0 * length / window.rate
    last = f"{span:.1f} ms"
    axis = "0 ms".ljust(max(4, plot_width - len(last))) + last
    lines.append([(" " * AXIS + axis, "dim")])
    return lines


def _shown(view: View, cycles: int) -> str:
    if not cycles:
        return "no steady frequency, a fixed time"
    shown = min(view.cycles, cycles)
    return "1 cycle" if shown == 1 else f"{shown} cycles"


def _levels(
    channel: ChannelView, reading: Reading, low: float, high: float, rows: int, ascii_only: bool
) -> tuple[dict[int, str], dict[int, tuple[str, str]]]:
    """Rows of the levels and their names; two that fall on one row move apart by name only."""
    unit = channel.channel.unit
    wanted = [
        (reading.peak_max, "highest", "dim", reading.u.get("peak")),
        (reading.rms, "true RMS", "rms", reading.u.get("rms")),
        (reading.averaging, "averaging meter", "level", reading.u.get("averaging")),
        (reading.peak_min, "lowest", "dim", reading.u.get("peak")),
    ]
    marks: dict[int, str] = {}
    labels: dict[int, tuple[str, str]] = {}
    for value, name, meaning, u in wanted:
        row = row_of(value, low, high, rows) if math.isfinite(value) else None
        if row is None:
            continue
        if meaning != "dim":
            marks[row] = meaning
        arrow = "<" if ascii_only else "◂"
        text = f"{arrow} {name} {wording.quantity(value, unit, u)}"
        place = row
        while place in labels and place + 1 < rows:
            place += 1
        labels[place] = (text, meaning if meaning != "dim" else "text")
    return marks, labels


def _scale(low: float, high: float, rows: int, unit: str) -> dict[int, str]:
    scale: dict[int, str] = {}
    for value in ticks(low, high, max(2, rows // 2)):
        row = row_of(value, low, high, rows)
        if row is not None:
            scale[row] = f"{value:g}" + (f" {unit}" if value == 0.0 else "")
    return scale


def _spectrum(channel: ChannelView, view: View, width: int, height: int) -> list[Line]:
    reading = channel.reading
    assert reading is not None
    title: Line = [("harmonics", "title")]
    remark: Line = []
    if math.isfinite(reading.thd_f):
        top = len(reading.harmonics)
        remark = [(f"THD-F to order {top}: {100.0 * reading.thd_f:.2f} %", "text")]
    lines = [rule(title, remark, width, view.ascii_only)]
    if not len(reading.harmonics) or not math.isfinite(reading.thd_f):
        lines.append([("  no fundamental to compare harmonics with", "dim")])
        return lines
    shares = 100.0 * np.abs(reading.harmonics) / reading.fundamental
    table_width = 30
    plot_width = width - table_width - AXIS - 2
    wide = 3 if plot_width >= 3 * len(shares) else 2 if plot_width >= 2 * len(shares) else 1
    shown = min(len(shares), plot_width // wide)
    ceiling = max(5.0, 1.1 * float(shares[1:shown].max(initial=0.0)))
    rows = height - 2
    drawn = bars(np.minimum(shares[:shown] / ceiling, 1.0), rows, view.glyphs)
    plot: list[Line] = []
    for y, row in enumerate(drawn):
        label = f"{ceiling:.0f} %" if y == 0 else ""
        stretched = "".join(c * (wide - 1) + " " if wide > 1 else c for c in row)
        plot.append([(f"{label:>{AXIS - 1}} ", "dim"), (stretched, "bar")])
    orders = ""
    for order in range(1, shown + 1):
        mark = str(order) if order == 1 or order % 5 == 0 else ""
        if len(orders) <= (order - 1) * wide and mark:
            orders = orders.ljust((order - 1) * wide) + mark
    plot.append([(" " * AXIS + orders, "dim")])
    strongest = np.argsort(-shares[1:])[: rows + 1] + 2
    table: list[Line] = [[("fundamental = 100 %", "dim")]]
    for order in sorted(strongest[: max(1, rows)].tolist()):
        phase = math.degrees(float(np.angle(reading.harmonics[order - 1])))
        table.append(
            [(f"{order:>3}  ", "dim"), (f"{shares[order - 1]:6.2f} %  {phase:+7.1f}°", "text")]
        )
    return lines + beside(plot, table[: height - 1], width - table_width)
