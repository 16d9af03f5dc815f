"""How a table of samples is laid out: separator, decimal mark, header, units, which column is time.

Every pair of separator and decimal mark is tried on the first lines. Where two of them give
different numbers and nothing decides between them, the file is refused and both readings are
shown: a wrong guess would measure nonsense without a word.
"""

import re
from dataclasses import dataclass, replace
from enum import StrEnum
from itertools import pairwise

from acquisition.recordings.csv_reading import (
    CLOCK,
    DATE,
    ENOUGH_TO_SEE_A_ZERO,
    LINES_LOOKED_AT,
    NO_NUMBER,
    READINGS,
    STAMP,
    Fit,
    fit_of,
    number,
    split,
)
from acquisition.recordings.placing import unique
from acquisition.recordings.readable import refused
from acquisition.stream import clean


class TimeKind(StrEnum):
    """What stands in the time column."""

    SECONDS = "seconds"  # numbers, in a unit
    STAMP = "stamp"  # date and time as ISO 8601 text
    CLOCK = "clock"  # time of day, perhaps with the date in a column before it
    NUMBER = "number"  # sample numbers: they show gaps but no rate


@dataclass(frozen=True, slots=True)
class Layout:
    """How to read the lines of one file."""

    separator: str  # " " stands for any run of blanks
    decimal: str
    columns: int  # fields a line has, time included
    first_line: int  # number of the first data line, from 1
    names: tuple[str, ...]  # of the channels
    units: tuple[str, ...]
    time_at: int | None = None  # column of the time; CLOCK with a date: the column of the clock
    time_kind: TimeKind | None = None
    time_unit: float = 1.0  # s
    trailing: bool = False  # every line ends on a separator
    undecided: bool = False  # no number so far had a decimal mark
    left_out: tuple[int, ...] = ()  # columns without a single number
    notes: tuple[str, ...] = ()

    @property
    def dated(self) -> bool:
        """Whether a date stands in a column of its own before the clock."""
        return self.time_kind is TimeKind.CLOCK and self.time_at == 1


_TITLE = re.compile(r"^(.*?)\s*(?:\[([^\]]*)\]|\(([^)]*)\))$")
_SLASHED = re.compile(r"^(.+?)\s*/\s*([mkMuµμn]?(?:V|A|s))$")
_TIME = re.compile(
    r"(?i)^(time|t|timestamp|times|zeit|temps|tiempo|seconds?|secs?)(?:_([a-zµμ]+))?$"
)
_ORDINAL = re.compile(r"(?i)^(n|no\.?|nr\.?|#|index|idx|samples?|point|sample[ _](?:no|number))$")
_UNIT_CELL = re.compile(r"^[\[(]?(?:[mkMuµμn]?(?:V|A|s|W|Hz)|sec|volts?|amp(?:ere)?s?)?[\])]?$")
_SECONDS = {
    "": 1.0, "s": 1.0, "sec": 1.0, "secs": 1.0, "second": 1.0, "seconds": 1.0, "ms": 1e-3,
    "us": 1e-6, "µs": 1e-6, "μs": 1e-6, "ns": 1e-9, "min": 60.0,
}  # fmt: skip

# In this order: the first of readings that give the same numbers is taken.


def find_layout(lines: list[str], name: str) -> Layout:
    """Work out the layout from the first lines of a file.

    Args:
        lines: whole lines without their ends, as many as were read.
        name: what to call the file in a sentence.
    Raises:
        RecordingRefused: no table, or two readings that nothing decides between.
    """
    fits: dict[object, Fit] = {}
    undecided = False
    for separator, decimal in READINGS:
        fit = fit_of(lines, separator, decimal)
        if fit is not None:
            key = (fit.start, fit.columns, fit.values)
            undecided |= key in fits and fits[key].separator == fit.separator
            fits.setdefault(key, fit)
    if not fits:
        raise _no_table(lines, name)
    choices = list(fits.values())
    notes: list[str] = []
    if len(choices) > 1:
        titled = [fit for fit in choices if _header(lines, fit)[0] is not None]
        # One title with commas in it is rather several titles.
        most = max((fit.columns for fit in titled), default=0)
        choices = [fit for fit in titled if fit.columns == most] or choices
    if len(choices) > 1:
        choices = _by_zeros(lines, choices, notes)
    if len(choices) > 1:
        raise _two_ways(choices, lines, name)
    return _described(lines, choices[0], undecided, notes, name)


def _by_zeros(lines: list[str], choices: list[Fit], notes: list[str]) -> list[Fit]:
    """Two columns of whole numbers, or one of decimals with a comma: look for `3,05`."""
    parts = [fit for fit in choices if fit.separator == "," and fit.columns == 2]
    wholes = [fit for fit in choices if fit.decimal == "," and fit.columns == 1]
    if len(choices) != 2 or not parts or not wholes:
        return choices
    second = [row[1] for row in parts[0].rows if re.fullmatch(r"\d\d+", row[1])]
    if any(cell.startswith("0") for cell in second):
        notes.append("The comma was taken for a decimal mark: a number cannot begin with 0.")
        return wholes
    if len(second) >= ENOUGH_TO_SEE_A_ZERO:
        notes.append(
            "The comma was taken to part two columns of whole numbers: in"
            f" {len(second)} lines no digits after it begin with 0, as decimals would."
        )
        return parts
    return choices


# -- header --------------------------------------------------------------------------------------


def _header(lines: list[str], fit: Fit) -> tuple[list[str] | None, list[str] | None, int]:
    """Titles, a row of units below them, and how many lines came before them all."""
    before = [k for k in range(fit.start) if lines[k].strip()]
    if not before:
        return None, None, 0
    cells = _titles(lines[before[-1]], fit)
    if cells is None:
        return None, None, fit.start
    if all(_UNIT_CELL.match(cell) for cell in cells) and len(before) > 1:
        above = _titles(lines[before[-2]], fit)
        if above is not None:
            return above, cells, before[-2]
    return cells, None, before[-1]


def _refuse_other_header(lines: list[str], fit: Fit, name: str) -> None:
    """Refuse a header that has another count of names than the lines below it have fields."""
    above = next((k for k in range(fit.start - 1, -1, -1) if lines[k].strip()), None)
    if above is None:
        return
    cells = split(lines[above].lstrip("\ufeff#% "), fit.separator)
    if not 2 <= len(cells) < fit.columns or not any(
        _TIME.match(title) or unit for title, unit in map(_name_and_unit, cells)
    ):
        return
    where = f"line {fit.start + 1}, {clean(lines[fit.start], 30)}, is"
    if fit.separator == "," and fit.columns == 2 * len(cells):
        raise refused(
            f"{name} can be read in two ways: {where} {fit.columns} columns, or {len(cells)} as in"
            " the header, with a comma for the decimal mark",
            "save it with semicolons between the columns, or with decimal points",
        )
    raise refused(
        f"{name}: the header in line {above + 1} names {len(cells)} columns, but {where}"
        f" {fit.columns}",
        "give every column a name, and write decimals with a point",
    )


def _titles(line: str, fit: Fit) -> list[str] | None:
    line = line.lstrip("\ufeff").lstrip("#%").strip("\r\n ") if line.strip() else line
    cells = split(line, fit.separator)
    if fit.separator == " " and len(cells) != fit.columns:
        cells = [cell.strip() for cell in re.findall(r"[^\s\[(]+(?:\s*[\[(][^\])]*[\])])?", line)]
    if fit.trailing and len(cells) == fit.columns + 1 and cells[-1] == "":
        cells.pop()
    if len(cells) != fit.columns or not any(cells):
        return None
    if any(cell and number(cell, fit.decimal) is not None for cell in cells):
        return None
    return cells


def _described(lines: list[str], fit: Fit, undecided: bool, notes: list[str], name: str) -> Layout:
    titles, units_row, skipped = _header(lines, fit)
    if titles is None:
        skipped = fit.start
        _refuse_other_header(lines, fit, name)
    preamble = [line for line in lines[:skipped] if line.strip()]
    if preamble:
        first = clean(preamble[0], 40)
        notes.insert(
            0,
            f"1 line before the table was skipped: {first}."
            if len(preamble) == 1
            else f"{len(preamble)} lines before the table were skipped, from: {first}.",
        )
    pairs = [_name_and_unit(title) for title in titles or [""] * fit.columns]
    if units_row is not None:
        pairs = [
            (one, unit or cell.strip("[]()"))
            for (one, unit), cell in zip(pairs, units_row, strict=True)
        ]
    layout = Layout(
        separator=fit.separator,
        decimal=fit.decimal,
        columns=fit.columns,
        first_line=fit.start + 1,
        names=(),
        units=(),
        trailing=fit.trailing,
        undecided=undecided,
    )
    layout = _with_time(layout, fit, pairs, titles is not None, notes, name)
    rest, left_out = [], []
    for column, pair in enumerate(pairs):
        if column == layout.time_at or (layout.dated and column == 0):
            continue
        if all(NO_NUMBER.match(row[column]) for row in fit.rows):
            left_out.append(column)
            notes.append(
                f"Column {column + 1}{' ' * bool(pair[0])}{clean(pair[0])} holds no numbers and"
                " is left out."
            )
        else:
            rest.append(pair)
    if not rest:
        raise refused(f"{name} has no column of samples beside its time", "export the samples too")
    return replace(
        layout,
        names=tuple(unique([clean(one) for one, _ in rest])),
        units=tuple(clean(unit, 12) for _, unit in rest),
        left_out=tuple(left_out),
        notes=tuple(notes),
    )


def _name_and_unit(title: str) -> tuple[str, str]:
    found = _TITLE.match(title)
    if found:
        return found[1].strip(), (found[2] if found[2] is not None else found[3]).strip()
    slashed = _SLASHED.match(title)
    return (slashed[1], slashed[2]) if slashed else (title, "")


def _with_time(
    layout: Layout,
    fit: Fit,
    pairs: list[tuple[str, str]],
    titled: bool,
    notes: list[str],
    name: str,
) -> Layout:
    cells = fit.rows[0]
    if STAMP.match(cells[0]):
        return replace(layout, time_at=0, time_kind=TimeKind.STAMP)
    if CLOCK.match(cells[0]):
        return replace(layout, time_at=0, time_kind=TimeKind.CLOCK)
    if len(cells) > 1 and DATE.match(cells[0]) and CLOCK.match(cells[1]):
        return replace(layout, time_at=1, time_kind=TimeKind.CLOCK)
    if not titled:
        return _guessed_time(layout, fit, notes, name)
    for column, (title, unit) in enumerate(pairs):
        found = _TIME.match(title)
        # Elsewhere than in front only a full word is taken for time: T may be a temperature.
        if found is None or (column > 0 and len(found[1]) < 4):
            continue
        wanted = (unit or found[2] or "").strip().lower()
        if wanted not in _SECONDS:
            raise refused(
                f"{name}: the unit of its time column, {clean(wanted, 12)}, is not known",
                "name the column time [s], time [ms] or time [us]",
            )
        unit_s = _SECONDS[wanted]
        return replace(layout, time_at=column, time_kind=TimeKind.SECONDS, time_unit=unit_s)
    if _ORDINAL.match(pairs[0][0]) and fit.columns > 1:
        return replace(layout, time_at=0, time_kind=TimeKind.NUMBER)
    return layout


def _guessed_time(layout: Layout, fit: Fit, notes: list[str], name: str) -> Layout:
    """Without a header: a first column that rises in even steps is time, or a sample number."""
    first = [row[0] for row in fit.values]
    values = [value for value in first if isinstance(value, float)]
    if fit.columns < 2 or len(values) < 8 or len(values) < len(first):
        return layout
    steps = [b - a for a, b in pairwise(values)]
    if min(steps) <= 0.0 or max(steps) > 1.5 * min(steps):
        return layout
    if all(step == 1.0 for step in steps):
        notes.append("The first column was taken for sample numbers.")
        return replace(layout, time_at=0, time_kind=TimeKind.NUMBER)
    # Mains needs some hundred samples a second; slower ones are likely in another unit.
    if min(steps) > 1.0 / 200.0:
        raise refused(
            f"{name}: its first column looks like time, but in which unit is not said"
            f" (steps of {min(steps):g})",
            "add a header line, with the first column named time [s], time [ms] or time [us]",
        )
    notes.append("The first column was taken for time in seconds; a header line would say.")
    return replace(layout, time_at=0, time_kind=TimeKind.SECONDS)


# -- refusals ------------------------------------------------------------------------------------


def _two_ways(choices: list[Fit], lines: list[str], name: str) -> Exception:
    where = choices[0].start
    ways = " or ".join(
        f"{fit.columns} column{'s' if fit.columns > 1 else ''}"
        f" ({' | '.join(f'{v:g}' if isinstance(v, float) else clean(v, 12) for v in row[:4])})"
        for fit in choices[:2]
        for row in [fit.values[min(where, fit.start) - fit.start]]
    )
    return refused(
        f"{name} can be read in two ways: line {where + 1}, {clean(lines[where], 30)}, is {ways}",
        "add a header line with a name for every column, or write decimals with a point",
    )


def _no_table(lines: list[str], name: str) -> Exception:
    text = [(k, line) for k, line in enumerate(lines) if line.strip()]
    if not text:
        return refused(f"{name} holds nothing but blank lines", "check that it is the right file")
    thousands = re.compile(r"\d{1,3}(?:\.\d{3})+,\d|\d{1,3}(?:,\d{3})+\.\d")
    for k, line in text[:LINES_LOOKED_AT]:
        found = thousands.search(line)
        if found:
            return refused(
                f"{name}: line {k + 1} has numbers with a mark for the thousands"
                f" ({clean(found[0], 20)}…), which can be read in two ways",
                "export them without thousands separators",
            )
    k, line = text[min(1, len(text) - 1)]
    return refused(
        f"{name} holds no rows of numbers that can be made out;"
        f" line {k + 1} reads: {clean(line, 40)}",
        "a table has a header line such as time [s],U [V],I [A] and a line for each sample",
        "if it is what a logger sent, try --format text",
    )
