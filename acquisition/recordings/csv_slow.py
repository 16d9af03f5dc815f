"""The slow road for lines of a table that the fast one leaves: exponents, blanks, quotes, words.

Lines with the right count of separators go through numpy together and are halved until only the
ones it does not like are left; those and the quoted ones are taken cell by cell.
"""

import math

import numpy as np
import numpy.typing as npt

from acquisition.recordings.csv_layout import Layout
from acquisition.recordings.csv_reading import number, split

Floats = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]


def read_slowly(lines: list[bytes], columns: int, layout: Layout) -> tuple[Floats, Mask, Mask]:
    """Read lines one by one.

    Args:
        lines: without their ends; without the texts of a time column.
        columns: fields that each should have.
    Returns:
        Cells (columns, n), NaN where a cell is no number; lines (n,) with another count of
        fields; lines (n,) with nothing in them, or a remark.
    """
    rows = np.full((columns, len(lines)), np.nan)
    wrong = np.zeros(len(lines), np.bool_)
    nothing = np.zeros(len(lines), np.bool_)
    together: list[int] = []
    separator = layout.separator.encode()
    for k, line in enumerate(lines):
        if line.count(separator) == columns - 1 and b'"' not in line and line.strip():
            together.append(k)
            continue
        text = line.decode("latin-1").strip()
        if not text or text[0] in "#%":
            nothing[k] = True
            continue
        cells = split(text, layout.separator)
        if layout.trailing and len(cells) == columns + 1:
            cells.pop()
        wrong[k] = len(cells) != columns
        if not wrong[k]:
            rows[:, k] = [_cell(cell, layout.decimal) for cell in cells]
    _together(lines, together, rows, layout)
    return rows, wrong, nothing


def _together(lines: list[bytes], at: list[int], rows: Floats, layout: Layout) -> None:
    """Read the lines `at`, which have the right separators, into their rows."""
    if not at:
        return
    if len(at) == 1:
        cells = split(lines[at[0]].decode("latin-1"), layout.separator)
        rows[:, at[0]] = [_cell(cell, layout.decimal) for cell in cells]
        return
    text = b"\n".join(lines[k] for k in at)
    if layout.decimal == ",":
        text = text.replace(b".", b"x").replace(b",", b".")
    text = text.replace(layout.separator.encode(), b",").replace(b"\n", b",")
    # numpy 2.4 reads a field of blanks as -1.
    solid = b"," + text.translate(None, b" \t\v\f") + b","
    try:
        flat = np.empty(0) if b",," in solid else np.fromstring(text.decode("latin-1"), sep=",")
    except ValueError:
        flat = np.empty(0)
    if len(flat) == len(rows) * len(at):
        rows[:, at] = flat.reshape(-1, len(rows)).T
        return
    middle = len(at) // 2
    _together(lines, at[:middle], rows, layout)
    _together(lines, at[middle:], rows, layout)


def _cell(cell: str, decimal: str) -> float:
    value = number(cell, decimal)
    return math.nan if value is None else value
