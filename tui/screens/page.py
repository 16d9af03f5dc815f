"""What every page has: a head line on the source, a foot line of keys, and room between."""

from dataclasses import dataclass, field

from shift import wording
from shift.snapshot import Snapshot, Stage
from tui.figures import Steady
from tui.lines import Line, fit, width_of

# Below this the page shrinks to tiles and says so.
SMALLEST = (80, 24)


@dataclass(slots=True)
class View:
    """What the person has chosen on the screen; pages read it, keys change it."""

    glyphs: str = "braille"
    page: str = "now"
    channel: int = 0  # chosen on Wave
    first: int = 0  # first channel shown on Now
    cycles: int = 2  # drawn on Wave
    frozen: Snapshot | None = None
    steady: Steady = field(default_factory=Steady)

    @property
    def ascii_only(self) -> bool:
        """Whether nothing beyond ASCII may be drawn."""
        return self.glyphs == "ascii"


def head(snapshot: Snapshot, view: View, width: int) -> Line:
    """Source and stage on the left, the stream's account on the right."""
    reading = next((c.reading for c in snapshot.channels if c.reading is not None), None)
    frequency = ""
    if reading is not None and reading.cycles:
        held = " held" if reading.lock.value == "holding" else ""
        frequency = f"{reading.frequency:.3f} Hz{held}"
    elif reading is not None:
        frequency = "no steady frequency"
    tally = snapshot.stream.tally
    lost = "loss unknown" if tally.lost is None else f"{tally.lost} lost"
    running = wording.duration(snapshot.seconds) if snapshot.seconds else ""
    right = "  ".join(part for part in (frequency, lost, running) if part)
    stage, meaning = snapshot.stage.value, "agrees"
    if snapshot.stage in (Stage.WAITING, Stage.FAILED):
        meaning = "misleads"
    if view.frozen is not None:
        stage, meaning = "FROZEN", "here"
    left: Line = [
        (" crestwatch ", "title"),
        (f" {snapshot.source} ", "text"),
        (f" {stage}", meaning),
    ]
    free = width - width_of(left) - len(right) - 1
    if free < 1:
        return fit(left, width)
    return fit([*left, (" " * free, "text"), (right, "dim")], width)


def foot(keys: list[tuple[str, str]], width: int, remark: str = "") -> Line:
    """The keys that work here, each with its word."""
    line: Line = [(" ", "text")]
    for key, word in keys:
        line += [(key, "key"), (f" {word}  ", "dim")]
    if remark:
        free = width - width_of(line) - len(remark) - 1
        if free > 0:
            line += [(" " * free, "text"), (remark, "dim")]
    return fit(line, width)


def waiting(snapshot: Snapshot, width: int, height: int) -> list[Line]:
    """What stands in the middle while there is nothing measured yet."""
    from tui.lines import wrap

    lines: list[Line] = [[] for _ in range(max(0, height // 2 - 3))]
    meaning = "misleads" if snapshot.stage is Stage.FAILED else "title"
    for row in wrap(snapshot.words, max(20, width - 12), meaning, 4):
        lines.append([("      ", "text"), *row])
    for advice in (*snapshot.advice, *snapshot.stream.advice):
        for row in wrap(advice, max(20, width - 16), "dim", 3):
            lines.append([("        ", "text"), *row])
    return lines
