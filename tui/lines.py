"""Lines of styled text: what every page is drawn as, before any terminal.

A line is a list of (text, meaning) spans; `tui.palette` knows the colour of a meaning. Widths are
in terminal cells.
"""

from collections.abc import Iterable, Sequence

from rich.cells import cell_len, set_cell_size

Span = tuple[str, str]
Line = list[Span]


def width_of(line: Iterable[Span]) -> int:
    """How many cells a line takes."""
    return sum(cell_len(text) for text, _ in line)


def fit(line: Iterable[Span], width: int) -> Line:
    """The line cut or padded to exactly `width` cells."""
    out: Line = []
    left = width
    for text, meaning in line:
        if left <= 0:
            break
        size = cell_len(text)
        if size > left:
            text, size = set_cell_size(text, left), left
        out.append((text, meaning))
        left -= size
    if left > 0:
        out.append((" " * left, "text"))
    return out


def beside(left: Sequence[Line], right: Sequence[Line], width: int, gap: int = 2) -> list[Line]:
    """Two blocks side by side, the left `width` cells wide."""
    rows = max(len(left), len(right))
    out = []
    for y in range(rows):
        a = fit(left[y] if y < len(left) else [], width)
        b = list(right[y]) if y < len(right) else []
        out.append([*a, (" " * gap, "text"), *b])
    return out


def wrap(text: str, width: int, meaning: str, most: int) -> list[Line]:
    """A sentence over at most `most` lines; what does not fit ends in an ellipsis."""
    words, lines, row = text.split(), [], ""
    for word in words:
        longer = f"{row} {word}" if row else word
        if cell_len(longer) <= width or not row:
            row = longer
        else:
            lines.append(row)
            row = word
    if row:
        lines.append(row)
    if len(lines) > most:
        lines = lines[:most]
        lines[-1] = set_cell_size(lines[-1], max(0, min(width - 1, cell_len(lines[-1])))) + "…"
    return [[(line, meaning)] for line in lines]


def rule(title: Iterable[Span], right: Iterable[Span], width: int, ascii_only: bool) -> Line:
    """A line across with a title on the left and a remark on the right."""
    dash = "-" if ascii_only else "─"
    title, right = list(title), list(right)
    free = width - width_of(title) - width_of(right) - 6
    if free < 1:
        return fit([(dash * 2 + " ", "rule"), *title], width)
    middle = (f" {dash * free} ", "rule")
    return fit([(dash * 2 + " ", "rule"), *title, middle, *right, (f" {dash}", "rule")], width)


def ascii_only(lines: Iterable[Line]) -> list[Line]:
    """The lines for a terminal that knows nothing beyond ASCII, every cell in its place."""
    return [
        [
            (text if text.isascii() else "".join(map(_ascii, text)), meaning)
            for text, meaning in line
        ]
        for line in lines
    ]


def plain(lines: Iterable[Line]) -> str:
    """The text alone, for a test or a pipe."""
    return "\n".join("".join(text for text, _ in line).rstrip() for line in lines)


_ASCII = {"±": "~", "°": "'", "µ": "u", "…": ".", "Ω": "o"}


def _ascii(c: str) -> str:
    return c if c.isascii() else _ASCII.get(c, "?") * cell_len(c)
