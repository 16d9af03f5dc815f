"""One way of reading the lines of a table: a separator, a decimal mark, and whether they fit.

A cell is a number, a word for a missing one (`OL`, blank, nan), or something else, which then is
no line of samples.
"""

import csv
import re
from dataclasses import dataclass

# What instruments and spreadsheets write for a sample that they do not have.
NO_NUMBER = re.compile(
    r"(?i)[+-]?(?:|nan|-?nan|inf|infinity|o\.?l\.?|ovl|over|overload|overflow|n/?a|null|none|err"
    r"|error|-+|\?+|\*+|#num!|#n/a|#value!|#div/0!)$"
)
_NUMBER = {
    ".": re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?$"),
    ",": re.compile(r"[+-]?(?:\d+(?:,\d+)?|,\d+)(?:[eE][+-]?\d+)?$"),
}
STAMP = re.compile(r"\d{4}-\d\d-\d\d[T ]\d\d:\d\d(?::\d\d(?:[.,]\d+)?)?\s*(?:Z|[+-]\d\d:?\d\d)?$")
CLOCK = re.compile(r"\d{1,2}:\d\d:\d\d(?:[.,]\d+)?$")
DATE = re.compile(r"\d{4}[-/]\d\d[-/]\d\d$|\d{1,2}[./-]\d{1,2}[./-]\d{2,4}$")
# Comma and decimal comma go together where the cells stand in quotes.
READINGS = [(mark, decimal) for mark in ("\t", ";", ",", " ") for decimal in (".", ",")]
LINES_LOOKED_AT = 400
MOST_PREAMBLE = 200  # lines
MOST_COLUMNS = 1024
# Of numbers with a decimal comma about one in ten has a 0 right after it.
ENOUGH_TO_SEE_A_ZERO = 100  # lines: 0.9^100 = 3e-5


@dataclass(frozen=True, slots=True)
class Fit:
    """How the lines look under one separator and decimal mark."""

    separator: str
    decimal: str
    columns: int
    start: int  # index of the first data line
    rows: tuple[tuple[str, ...], ...]
    trailing: bool
    values: tuple[tuple[float | str, ...], ...]  # of the first rows, to compare readings


def split(line: str, separator: str) -> list[str]:
    """The fields of a line, blanks around them taken off, quotes honoured."""
    if '"' in line:
        if separator == " ":
            line = " ".join(line.split())
        fields = next(csv.reader([line], delimiter=separator, skipinitialspace=True), [])
        return [field.strip() for field in fields]
    if separator == " ":
        return line.split()
    return [field.strip() for field in line.split(separator)]


def number(cell: str, decimal: str) -> float | None:
    """A cell as a number; None when it is none, or not finite."""
    if _NUMBER[decimal].match(cell) is None:
        return None
    value = float(cell.replace(",", "."))
    return value if abs(value) != float("inf") else None


def fit_of(lines: list[str], separator: str, decimal: str) -> Fit | None:
    """The reading with this separator and decimal mark, when most lines from some place on fit."""
    looked: list[tuple[int, list[str]]] = []
    counts: dict[int, int] = {}
    for k, line in enumerate(lines[: MOST_PREAMBLE + LINES_LOOKED_AT]):
        if line.strip():
            fields = split(line, separator)
            if not _is_data(fields, decimal) or (separator == " " and "\t" in line):
                fields = []
            looked.append((k, fields))
            counts[len(fields)] = counts.get(len(fields), 0) + bool(fields)
    width = max(counts, key=lambda n: counts[n], default=0)
    if not width or width > MOST_COLUMNS:
        return None
    at = next(
        (
            p
            for p in range(len(looked))
            if all(len(fields) == width for _, fields in looked[p : p + 3])
        ),
        None,
    )
    if at is None:
        return None
    rest = looked[at : at + LINES_LOOKED_AT]
    rows = [tuple(fields) for _, fields in rest if len(fields) == width]
    if 10 * len(rows) < 6 * len(rest):
        return None
    trailing = width > 1 and separator != " " and all(row[-1] == "" for row in rows)
    if trailing:
        width -= 1
        rows = [row[:-1] for row in rows]
    values = tuple(tuple(_worth(cell, decimal) for cell in row) for row in rows[:60])
    return Fit(separator, decimal, width, looked[at][0], tuple(rows), trailing, values)


def _worth(cell: str, decimal: str) -> float | str:
    value = number(cell, decimal)
    return cell if value is None else value


def _is_data(fields: list[str], decimal: str) -> bool:
    """Whether a line holds samples: numbers, or words for a missing one; time may be text."""
    begin = 0
    if fields and (STAMP.match(fields[0]) or CLOCK.match(fields[0])):
        begin = 1
    elif len(fields) > 1 and DATE.match(fields[0]) and CLOCK.match(fields[1]):
        begin = 2
    any_number = False
    for cell in fields[begin:]:
        if _NUMBER[decimal].match(cell):
            any_number = True
        elif not NO_NUMBER.match(cell):
            return False
    return any_number or (begin > 0 and len(fields) > begin)
