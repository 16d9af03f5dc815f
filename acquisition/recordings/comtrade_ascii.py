"""The ASCII data of a COMTRADE recording: a line for each set: number, time, values, status."""

from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt

from acquisition.recordings.csv_lines import TextFile
from acquisition.recordings.csv_numbers import parse
from acquisition.recordings.readable import damaged, shown
from acquisition.stream import clean

Floats = npt.NDArray[np.float64]
COMMA, POINT = 44, 46
MISSING = 99999.0  # so in 1991; later a field with nothing in it


def read_ascii(
    path: Path, place: tuple[int, int, int], limits: Sequence[float], status: int
) -> Iterator[tuple[int, npt.NDArray[np.int64], Floats, Floats, npt.NDArray[np.bool_]]]:
    """(bytes read, set numbers (n,), times (n,), values (channels, n), not missing (channels, n)).

    Args:
        place: of the data in the file: first byte, end, number of the first line.
        limits: the largest possible value of each channel: where 99999 is one, it is no marker.
        status: how many status channels follow the values.
    Raises:
        RecordingDamaged: a line that is no set; names it. What came before stands.
    """
    channels = len(limits)
    columns = 2 + channels + status
    marked = np.array([not limit > MISSING or limit == np.inf for limit in limits])[:, None]
    begin, end, line = place
    file = TextFile(path, begin, end)
    for piece in file.pieces():
        first = line
        line += piece.count(b"\n")
        piece = piece.replace(b"\x1a", b"").replace(b" ", b"")
        if not piece.endswith(b"\n"):
            piece += b"\n"
        found = parse(piece, COMMA, POINT, columns)
        table, keep, bad = found.table, np.ones(len(found.odd), np.bool_), ""
        for k in np.flatnonzero(found.odd).tolist():
            text = piece[found.starts[k] : found.ends[k]].decode("latin-1")
            fields = text.split(",")
            if not text:
                keep[k] = False
                continue
            # A line may lack the status values it promises; the analogue ones count.
            row = _row(fields, 2 + channels)
            if row is None:
                keep[k:] = False
                bad = f"{shown(path)} line {first + k} is no set of {columns} fields: {clean(text)}"
                break
            table[: 2 + channels, k] = row
        if not keep.all():
            table = table[:, keep]
        if table.shape[1]:
            numbers = np.nan_to_num(table[0], nan=0.0).astype(np.int64)
            values = np.ascontiguousarray(table[2 : 2 + channels])
            good = np.isfinite(values) & ~(marked & (values == MISSING))
            yield file.bytes_read - begin, numbers, table[1], values, good
        if bad:
            raise damaged(bad, "what is before it was read")


def _row(fields: list[str], least: int) -> list[float] | None:
    """Number, time and values of a line by hand: fields may be empty; None when it is no set."""
    if len(fields) < least:
        return None
    try:
        return [float(field) if field else float("nan") for field in fields[:least]]
    except ValueError:
        return None
