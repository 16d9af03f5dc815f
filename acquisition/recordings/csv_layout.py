"""How a CSV file is laid out: separator, decimal mark, header, units, which column is time.

Guessing wrongly would measure nonsense without a word, so where two readings fit the file is
refused and both are shown.
"""

import re
from dataclasses import dataclass
from pathlib import Path

from acquisition.recordings.faults import refused
from acquisition.stream import clean

TIME_UNITS = {"s": 1.0, "ms": 1e-3, "us": 1e-6, "µs": 1e-6, "μs": 1e-6, "ns": 1e-9}
_TIME_NAME = re.compile(
    r"(?i)^(?:time|t|zeit|temps)"
    r"(?:[ _]*(?:\[|\()?\s*(s|ms|us|µs|μs|ns|sec|seconds?)?\s*(?:\]|\))?)?$"
)
_NUMBER = re.compile(r"^[+-]?(?:\d+(?:[.,]\d*)?|[.,]\d+)(?:[eE][+-]?\d+)?$")
_ISO = re.compile(r"^\d{4}-\d\d-\d\d[T ]\d\d:\d\d")
_BAD_CELLS = {
    "",
    "nan",
    "inf",
    "-inf",
    "ol",
    "-ol",
    "o.l.",
    "overload",
    "n/a",
    "na",
    "null",
    "-",
    "---",
}
MOST_PREAMBLE = 200  # lines of an instrument's own words before the header


@dataclass(frozen=True, slots=True)
class Layout:
    """How to read a file's lines."""

    separator: str
    decimal: str
    names: tuple[str, ...]  # of every column
    units: tuple[str, ...]
    time_unit: float | None  # s a unit of column 0; None: it is no time
    iso_time: bool  # column 0 is date and time in words
    first_line: int  # number of the first line of data, 1 the file's first
    skipped: tuple[str, ...]  # preamble lines, cleaned

    @property
    def columns(self) -> int:
        """How many fields a line has."""
        return len(self.names)

    @property
    def has_time(self) -> bool:
        """Whether column 0 is time."""
        return self.time_unit is not None or self.iso_time


def find_layout(lines: list[str], path: Path) -> Layout:
    """Work the layout out from a file's first lines.

    Raises:
        RecordingRefused: there are no rows of numbers, or two readings fit.
    """
    rows = [line for line in lines if line.strip()]
    if not rows:
        raise refused(path, "holds no line of text", "record again")
    best: tuple[int, str] | None = None
    for separator in ("\t", ";", ","):
        run = _longest_run(lines, separator)
        if run >= 1 and (best is None or run > best[0]):
            best = (run, separator)
    if best is None:
        raise refused(
            path,
            f"has no rows of numbers; it begins with {clean(rows[0], 40)!r}",
            "a CSV needs a header line and rows such as 0.000125,1.25,0.31",
        )
    separator = best[1]
    first = _first_row(lines, separator)
    fields = _split(lines[first], separator)
    decimal = _decimal(lines[first : first + 50], separator, path)
    header = first - 1
    while header >= 0 and not lines[header].strip():
        header -= 1
    titles = _split(lines[header], separator) if header >= 0 else []
    titles = [title.strip().strip('"') for title in titles]
    if titles and len(titles) != len(fields):
        if separator == "," and len(fields) == 2 * len(titles):
            raise refused(
                path,
                "reads two ways: the comma may part columns or be the decimal mark "
                f"(line {first + 1}: {clean(lines[first], 40)!r}, {len(titles)} column titles)",
                "save it with semicolons between columns, or with decimal points",
            )
        if separator == "," and len(titles) == 1 and len(fields) == 2:
            raise refused(
                path,
                f"reads two ways: line {first + 1} is one number with a decimal comma, or two",
                "save it with decimal points, or give every column a title",
            )
        titles = []
    if not titles:
        header = -1 if header < 0 else header
        titles = [f"ch{n}" for n in range(1, len(fields) + 1)]
        skipped_to = first
    else:
        skipped_to = header
    names, units = zip(*(_title(title, n) for n, title in enumerate(titles, 1)), strict=True)
    time_unit, iso = _time_column(titles[0], fields[0])
    if len(fields) == 1 and (time_unit is not None or iso):
        time_unit, iso = None, False
    skipped = tuple(clean(line, 60) for line in lines[:skipped_to] if line.strip())
    return Layout(
        separator, decimal, names, units, time_unit, iso, first + 1, skipped[:MOST_PREAMBLE]
    )


def value(text: str, decimal: str) -> float | None:
    """A cell as a number; None for overload, blank, or anything that is none."""
    text = text.strip().strip('"')
    if text.lower() in _BAD_CELLS:
        return None
    if decimal == ",":
        text = text.replace(",", ".")
    try:
        number = float(text)
    except ValueError:
        return None
    return number if abs(number) < float("inf") else None


def _split(line: str, separator: str) -> list[str]:
    return line.rstrip("\r\n").split(separator)


def _numeric(line: str, separator: str) -> int:
    """How many fields a row of numbers has; 0 when it is none."""
    fields = [field.strip().strip('"') for field in _split(line, separator)]
    if len(fields) > 1 and fields[-1] == "":
        fields = fields[:-1]
    good = [bool(_NUMBER.match(f)) for f in fields]
    iso = bool(_ISO.match(fields[0]))
    known = [ok or f.lower() in _BAD_CELLS for ok, f in zip(good, fields, strict=True)]
    if iso:
        known[0] = True
    if not all(known) or not (any(good) or iso):
        return 0
    if separator != "," and any("," in f and "." in f for f in fields):
        return len(fields)
    return len(fields)


def _longest_run(lines: list[str], separator: str) -> int:
    """Rows of numbers in a row, weighed by their columns; a separator not seen counts least."""
    best = run = 0
    width = 0
    for line in lines:
        if not line.strip():
            continue
        n = _numeric(line, separator)
        run = run + 1 if n and n == width else (1 if n else 0)
        width = n
        best = max(best, run * (1 + 2 * (n > 1)))
    return best


def _first_row(lines: list[str], separator: str) -> int:
    """First line of the first steady run of numbers."""
    candidates = [n for n, line in enumerate(lines) if line.strip()]
    widths = {n: _numeric(lines[n], separator) for n in candidates}
    for k, n in enumerate(candidates):
        following = [widths[m] for m in candidates[k : k + 3]]
        if widths[n] and all(w == widths[n] for w in following):
            return n
    return next(n for n in candidates if widths[n])


def _decimal(rows: list[str], separator: str, path: Path) -> str:
    if separator == ",":
        return "."
    fields = [f for row in rows for f in _split(row, separator)]
    commas = [f for f in fields if "," in f]
    points = [f for f in fields if "." in f and not _ISO.match(f.strip())]
    if commas and points:
        raise refused(
            path,
            f"uses both comma and point inside numbers ({clean(commas[0], 20)!r}, "
            f"{clean(points[0], 20)!r}); one of them parts thousands",
            "save it without thousands separators",
        )
    return "," if commas else "."


def _title(title: str, n: int) -> tuple[str, str]:
    found = re.match(r"^(.*?)\s*(?:\[([^\]]*)\]|\(([^)]*)\))\s*$", title)
    if found is None:
        return clean(title) or f"ch{n}", ""
    return clean(found[1]) or f"ch{n}", clean(found[2] or found[3] or "", 12)


def _time_column(title: str, cell: str) -> tuple[float | None, bool]:
    if _ISO.match(cell.strip().strip('"')):
        return None, True
    found = _TIME_NAME.match(title.strip())
    if found is None:
        return None, False
    unit = (found[1] or "s").lower()
    return (1.0 if unit.startswith("s") else TIME_UNITS[unit]), False
