"""COMTRADE recordings: a .cfg with its .dat, or both in one .cff.

Read piece by piece, whatever the length. What the .cfg claims is compared with what the .dat
holds before anything is believed: how many sets, and that the sets are numbered one by one. Missing
values and missing numbers become gaps. Status channels are passed over.
"""

import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from acquisition.block import Block
from acquisition.recordings.comtrade_ascii import read_ascii
from acquisition.recordings.comtrade_cfg import Analog, Description, read_description
from acquisition.recordings.placing import SETS_AT_A_TIME, Placer, unique
from acquisition.recordings.readable import (
    beside,
    damaged,
    refused,
    shown,
    size_of,
    unreadable,
)
from acquisition.recordings.recording import RecordingOptions
from acquisition.recordings.timing import find_timing
from acquisition.recordings.wav import chosen_rate
from acquisition.stream import ChannelHint, StreamInfo

# numpy type and the number that stands for a missing value
_BINARY: dict[str, tuple[str, int | None]] = {
    "BINARY": ("<i2", -(2**15)),
    "BINARY32": ("<i4", -(2**31)),
    "FLOAT32": ("<f4", None),  # NaN or infinite
}
_BOTH = "a COMTRADE recording is two files: copy both, under one name"
LARGEST_CFG = 16 << 20  # bytes; 9999 channels take about 1 MB
_SECTION = re.compile(rb"^-+\s*file type:\s*([A-Za-z]+)\s*([A-Za-z0-9]*)\s*:?\s*(\d*)\s*-+\s*$")


@dataclass(frozen=True, slots=True, eq=False)
class _Sets:
    """A piece of the data."""

    numbers: npt.NDArray[np.int64]  # (n,) as written beside the samples
    times: npt.NDArray[np.float64]  # (n,) in the file's unit
    codes: npt.NDArray[Any]  # (channels, n)
    good: npt.NDArray[np.bool_]  # (channels, n): not missing


class ComtradeRecording:
    """A COMTRADE recording as Blocks of its codes, with gain and offset as the file says."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Read the description, find the data, compare the two.

        Args:
            path: of the .cfg, the .dat beside one, or the .cff.
        Raises:
            RecordingAbsent, RecordingRefused: a part is missing or not to be read, or they do not
                fit each other.
        """
        notes: list[str] = []
        if path.suffix.lower() == ".dat":
            cfg = beside(path, ".cfg")
            if cfg is None:
                raise refused(f"{shown(path)} has no {path.stem}.cfg beside it", _BOTH)
            notes.append(f"{path.name} is described by {cfg.name}, which was read too.")
            path = cfg
        self.path = path
        self._name = shown(path)
        if path.suffix.lower() == ".cff":
            self._said, self._data, place = _from_single(path, self._name)
        else:
            self._said = read_description(_text(path), self._name)
            data = beside(path, ".dat")
            if data is None:
                raise refused(f"{self._name} has no {path.stem}.dat beside it", _BOTH)
            self._data = data
            place = (0, size_of(data), 1)
        self._begin, self._end, self._first_line = place
        self.bytes_total = self._end - self._begin
        self._done = 0
        self._damage = ""
        self._promised = self._said.rates[-1][1]
        self.sets: int | None = self._count_sets(notes)
        first = self._first()
        self._numbered = self._check_numbers(first, notes)
        self._kept = self._alive(first, notes)
        rate = self._rate(options, first, notes)
        analogs = [self._said.analogs[k] for k in self._kept]
        names = unique([one.name for one in self._said.analogs])
        notes += _sides(analogs)
        if any(one.a == 0.0 for one in analogs):
            notes.append("A channel with the multiplier a = 0 reads its offset b throughout.")
        whole = first.codes.dtype.kind == "i" or bool(
            np.all(np.isfinite(first.codes)) and np.all(first.codes == np.rint(first.codes))
        )
        self.info = StreamInfo(
            format="comtrade",
            channels=tuple(
                _hint(one, names[k], whole, analogs[0].skew_s)
                for k, one in zip(self._kept, analogs, strict=True)
            ),
            rate=rate,
            sample_type={"ASCII": "float64", "BINARY": "i16", "BINARY32": "i32"}.get(
                self._said.type, "f32"
            ),
            byte_order="" if self._said.type == "ASCII" else "little",
            nominal_hz=self._said.nominal,
            started=self._said.started,
            unit_id=self._said.station,
            notes=tuple(notes),
        )

    def blocks(self) -> Iterator[Block]:
        """Blocks in order. Raises RecordingDamaged where the data end early or do not read."""
        placer = Placer()
        last: int | None = None
        flat = np.array([self._said.analogs[k].a == 0.0 for k in self._kept])
        given = 0
        for piece in self._pieces():
            codes = piece.codes[self._kept]
            if flat.any():
                codes[flat] = 0  # value = b, whatever the code
            good = np.asarray(piece.good[self._kept].all(axis=0))
            given += len(good)
            if not self._numbered:
                yield from placer.place_good(codes, good)
                continue
            before = int(piece.numbers[0]) - 1 if last is None else last
            # Numbers are of 32 bits and may wrap.
            steps = np.diff(piece.numbers, prepend=before) & 0xFFFFFFFF
            last = int(piece.numbers[-1])
            cuts = np.flatnonzero(steps != 1).tolist()
            for a, b in zip([0, *cuts], [*cuts, len(steps)], strict=True):
                if b == a:
                    continue
                if steps[a] != 1:
                    # Backwards or standing still: nobody knows.
                    placer.miss(int(steps[a]) - 1 if 1 < steps[a] < 2**31 else None)
                yield from placer.place_good(np.ascontiguousarray(codes[:, a:b]), good[a:b])
        if self._said.type == "ASCII" and given < self._promised:
            self._damage = self._cut_short(given)
        if self._damage:
            raise damaged(self._damage, "what is there was read")

    def bytes_read(self) -> int:
        """How far reading has come."""
        return self._done

    def close(self) -> None:
        """Nothing stays open between two pieces."""

    # -- what there is ----------------------------------------------------------------------

    def _count_sets(self, notes: list[str]) -> int | None:
        """How many sets the data hold, against what was promised."""
        if self._said.type == "ASCII":
            return None
        size = self._record().itemsize
        held, over = divmod(self.bytes_total, size)
        if held == 0:
            raise refused(
                f"{shown(self._data)} is shorter ({self.bytes_total} bytes) than one set of"
                f" {len(self._said.analogs)} analogue and {self._said.status} status channels"
                f" ({size} bytes)",
                "check that the two files belong together and were copied whole",
            )
        if held < self._promised:
            self._damage = self._cut_short(held)
            notes.append(self._damage + ".")
        elif held > self._promised:
            notes.append(
                f"The description promises {self._promised} sets, the data hold {held}:"
                " all are read."
            )
        elif over:
            notes.append(f"{over} bytes behind the last set were passed over.")
        return held

    def _cut_short(self, held: int) -> str:
        return (
            f"{shown(self._data)} is cut short: the description promises {self._promised} sets,"
            f" the data hold {held}"
        )

    def _first(self) -> _Sets:
        first = next(self._pieces(), None)
        if first is None:
            raise refused(f"{shown(self._data)} holds no set", "check that it was copied whole")
        return first

    def _check_numbers(self, first: _Sets, notes: list[str]) -> bool:
        """Whether the sets are numbered; refuse data that are not laid out as described."""
        numbers = first.numbers[:100]
        if not numbers.any():
            notes.append("The sets carry no numbers, so missing ones would not show.")
            return False
        steps = np.diff(numbers)
        if len(steps) and np.count_nonzero(steps == 1) < 0.5 * len(steps):
            k = int(np.flatnonzero(steps != 1)[0])
            raise refused(
                f"{shown(self._data)} is not laid out as the description says: set {k + 2}"
                f" is numbered {numbers[k + 1]}, the one before {numbers[k]}",
                f"check the counts of channels and the file type ({self._said.type}) in the"
                " description",
            )
        return True

    def _alive(self, first: _Sets, notes: list[str]) -> list[int]:
        """Channels that have values; one that never has any would make a gap of everything."""
        alive = first.good.any(axis=1)
        if not alive.any():
            raise refused(
                f"{shown(self._data)} marks every value as missing", "check the recorder's export"
            )
        dead = [self._said.analogs[k].name for k in np.flatnonzero(~alive).tolist()]
        if dead:
            notes.append(f"Left out, as all values are missing: {', '.join(dead[:8])}.")
        return [int(k) for k in np.flatnonzero(alive)]

    def _rate(self, options: RecordingOptions, first: _Sets, notes: list[str]) -> float:
        rates = sorted({rate for rate, _ in self._said.rates})
        if len(rates) > 1:
            parts = ", ".join(f"{rate:g} Hz to set {last}" for rate, last in self._said.rates[:4])
            raise refused(
                f"{self._name} changes its sample rate on the way ({parts})",
                "export a stretch of one rate as a recording of its own",
            )
        if rates[0] > 0.0:
            return chosen_rate(options, rates[0], notes)
        if options.rate is not None:
            return options.rate
        timing = find_timing(first.times * self._said.time_unit)
        if timing is None:
            raise refused(
                f"{self._name} gives no sample rate, and the times beside the samples tell none",
                "tell it, for example: --rate 4800",
            )
        notes.append(f"The rate, {timing.rate:.6g} Hz, was taken from the times of the samples.")
        return timing.rate

    # -- the data ---------------------------------------------------------------------------

    def _record(self) -> np.dtype[Any]:
        """One set of the binary kinds: number, time, analogue values, status bits by 16."""
        kind = _BINARY[self._said.type][0]
        return np.dtype(
            [
                ("n", "<u4"),
                ("t", "<u4"),
                ("x", kind, (len(self._said.analogs),)),
                ("d", "<u2", ((self._said.status + 15) // 16,)),
            ]
        )

    def _pieces(self) -> Iterator[_Sets]:
        self._done = 0
        if self._said.type != "ASCII":
            yield from self._binary()
            return
        limits = [one.high for one in self._said.analogs]
        place = (self._begin, self._end, self._first_line)
        for done, numbers, times, values, good in read_ascii(
            self._data, place, limits, self._said.status
        ):
            self._done = done
            yield _Sets(numbers, times, values, good)

    def _binary(self) -> Iterator[_Sets]:
        record = self._record()
        missing = _BINARY[self._said.type][1]
        left = self.sets or 0
        # A piece of about 4 MB, however many channels there are.
        most = max(1, min(SETS_AT_A_TIME, (4 << 20) // record.itemsize))
        try:
            with self._data.open("rb") as file:
                file.seek(self._begin)
                while left:
                    data = file.read(min(left, most) * record.itemsize)
                    rows = np.frombuffer(data, record, len(data) // record.itemsize)
                    if not len(rows):
                        raise damaged(f"{shown(self._data)} became shorter while it was read")
                    left -= len(rows)
                    self._done += len(data)
                    codes = np.ascontiguousarray(rows["x"].T)
                    good = np.isfinite(codes) if missing is None else codes != missing
                    yield _Sets(
                        rows["n"].astype(np.int64), rows["t"].astype(np.float64), codes, good
                    )
        except OSError as error:
            raise unreadable(self._data, error) from None


def _hint(one: Analog, name: str, whole: bool, skew_of_first: float) -> ChannelHint:
    gain = one.a * one.worth
    ends = (abs(one.low), abs(one.high))
    # Some recorders write here what a converter can give, others what the recording happens to
    # hold. Only powers of two are taken for a converter's rails.
    rails = all(end > 1 and np.log2(end + add) % 1 == 0 for end in ends for add in [end % 2])
    return ChannelHint(
        name=name,
        unit=one.unit,
        gain=gain if gain else 1.0,
        offset_codes=one.b / one.a if one.a else one.b * one.worth,
        rails=(one.low, one.high) if rails and one.low < one.high else None,
        skew_s=one.skew_s - skew_of_first,
        step=1.0 if whole else None,
    )


def _sides(analogs: list[Analog]) -> list[str]:
    """Which side of its transformer each channel's values are of, in a sentence."""
    told = [one for one in analogs if one.side]
    if not told:
        return []
    words = {"P": "primary", "S": "secondary"}
    sides = {one.side for one in told}
    if len(sides) == 1:
        return [f"Values are {words[told[0].side]} ones, as the file says."]
    secondary = ", ".join(one.name for one in told if one.side == "S")
    return [f"As the file says, these are secondary values, the others primary: {secondary}."]


def _text(path: Path) -> str:
    if size_of(path) > LARGEST_CFG:
        raise refused(f"{shown(path)} is too large for a description", "name the .cfg")
    return _decoded(path.read_bytes())


def _decoded(raw: bytes) -> str:
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def _from_single(path: Path, name: str) -> tuple[Description, Path, tuple[int, int, int]]:
    """The parts of a .cff: description, and the data's begin, end and first line."""
    size = size_of(path)
    sections: list[tuple[bytes, bytes, int, int, int]] = []  # kind, type, line, begin, length
    with path.open("rb") as file:
        line, at = 0, 0
        while at < size and at < LARGEST_CFG + 4096:
            text = file.readline(1 << 16)
            line += 1
            at += len(text)
            found = _SECTION.match(text.strip())
            if found is None:
                continue
            sections.append((found[1].upper(), found[2].upper(), line, at, int(found[3] or 0)))
            if found[1].upper() == b"DAT":
                break
        kinds = {kind: k for k, (kind, *_) in enumerate(sections)}
        if b"CFG" not in kinds or b"DAT" not in kinds:
            raise refused(
                f"{name} lacks the section {'CFG' if b'CFG' not in kinds else 'DAT'} of a .cff",
                "check that it was copied whole, or name the .cfg of a pair",
            )
        _, _, first_line, begin, _ = sections[kinds[b"CFG"]]
        following = next((one for one in sections if one[3] > begin), None)
        assert following is not None  # DAT comes after CFG or the loop had not ended
        file.seek(begin)
        raw = file.read(following[3] - begin)
    raw = raw.rstrip()
    raw = raw[: raw.rfind(b"\n") + 1]  # less the line that begins the next section
    said = read_description(_decoded(raw), name, first_line + 1)
    *_, data_line, data, length = sections[kinds[b"DAT"]]
    if length and said.type != "ASCII" and data + length < size:
        size = data + length
    return said, path, (data, size, data_line + 1)
