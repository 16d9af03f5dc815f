"""NPZ and NPY recordings: `samples` (channels × n, or n), `rate`, optional `names` and `units`.

Pickles are refused. A header is believed only after it was compared with the size of the file.
What lies uncompressed in the file is mapped, not loaded, so a day of samples needs little memory.
"""

import io
import struct
import zipfile
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
import numpy.typing as npt

from acquisition.block import Block
from acquisition.recordings.placing import SETS_AT_A_TIME, Placer, unique
from acquisition.recordings.readable import refused, shown, size_of
from acquisition.recordings.recording import RecordingOptions
from acquisition.recordings.wav import MOST_CHANNELS, chosen_rate
from acquisition.stream import ChannelHint, StreamInfo, clean

# A compressed array must be unpacked whole; beyond this, that is asking for trouble.
MOST_UNPACKED = 1 << 30  # bytes

# What zipfile raises on hurt archives, beside its own error.
_ODD = (OSError, ValueError, KeyError, EOFError, NotImplementedError, RuntimeError)
_SAVE = "save with numpy.savez(file, samples=array, rate=hertz), the array channels × n"


@dataclass(frozen=True, slots=True)
class _Header:
    shape: tuple[int, ...]
    fortran: bool
    dtype: np.dtype[Any]
    length: int  # bytes before the samples


class NpzRecording:
    """An .npz or .npy file as Blocks."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Open; map or load the samples.

        Raises:
            RecordingAbsent, RecordingRefused: not to be read, or not such a file.
        """
        self.path = path
        self.bytes_total = size_of(path)
        name = shown(path)
        with path.open("rb") as file:
            packed = file.read(4) == b"PK\x03\x04"
        notes: list[str] = []
        names: list[str] = []
        units: list[str] = []
        if packed:
            said = self._open_packed(name)
            rate = said.rate
            names, units = said.names, said.units
            samples = said.samples
        else:
            samples = _bare(path, self.bytes_total, name)
            rate = None
        self._samples = _channels_first(samples, name)
        channels, sets = self._samples.shape
        self.sets: int | None = sets
        for what, given in (("names", names), ("units", units)):
            if given and len(given) != channels:
                raise refused(
                    f"{name}: `{what}` has {len(given)} entries for {channels} channels", _SAVE
                )
        if rate is None and options.rate is None:
            raise refused(
                f"{name} does not tell its sample rate", "tell it, for example: --rate 8000"
            )
        chosen = options.rate if rate is None else chosen_rate(options, rate, notes)
        dtype = self._samples.dtype
        whole = dtype.kind in "iu"
        full = unique([clean(one) for one in names] or [""] * channels)
        units = units or [""] * channels
        self.info = StreamInfo(
            format="npz",
            channels=tuple(
                ChannelHint(name=one, unit=clean(unit), gain=1.0, step=1.0 if whole else None)
                for one, unit in zip(full, units, strict=True)
            ),
            rate=chosen,
            sample_type=f"{dtype.kind}{8 * dtype.itemsize}",
            byte_order="big" if dtype.str[0] == ">" else "little" if dtype.itemsize > 1 else "",
            notes=tuple(notes),
        )
        self._done = 0

    def blocks(self) -> Iterator[Block]:
        """Blocks in order; sets with a NaN or an infinity are gaps."""
        placer = Placer()
        self._done = 0
        native = self._samples.dtype.newbyteorder("=")
        if native.kind == "f":
            native = np.dtype(np.float64)
        for at in range(0, self._samples.shape[1], SETS_AT_A_TIME):
            part = np.array(self._samples[:, at : at + SETS_AT_A_TIME], dtype=native, order="C")
            self._done = at + part.shape[1]
            if native.kind == "f":
                yield from placer.place_good(part, np.asarray(np.isfinite(part).all(axis=0)))
            else:
                yield placer.place(part)

    def bytes_read(self) -> int:
        """How far reading has come."""
        return round(self.bytes_total * self._done / (self.sets or 1))

    def close(self) -> None:
        """Let go of the file: what was mapped goes with the last Block of it."""
        self._samples = self._samples[:, :0].copy()

    def _open_packed(self, name: str) -> "_Said":
        try:
            with zipfile.ZipFile(self.path) as archive:
                members = {info.filename: info for info in archive.infolist()}
                if "samples.npy" not in members:
                    there = ", ".join(clean(one, 20) for one in list(members)[:6]) or "nothing"
                    raise refused(f"{name} has no array `samples`; it holds {there}", _SAVE)
                said = _Said(
                    samples=_member(self.path, archive, members["samples.npy"], name),
                    rate=_rate(archive, members, name),
                    names=_words(archive, members, "names", name),
                    units=_words(archive, members, "units", name),
                )
        except (zipfile.BadZipFile, zlib.error, struct.error, *_ODD) as e:
            raise refused(
                f"{name} is damaged: {clean(str(e), 80)}",
                "copy it again; a cut .npz cannot be read",
            ) from None
        return said


@dataclass(frozen=True, slots=True, eq=False)
class _Said:
    samples: npt.NDArray[Any]
    rate: float | None
    names: list[str]
    units: list[str]


def _bare(path: Path, size: int, name: str) -> npt.NDArray[Any]:
    with path.open("rb") as file:
        head = _header(file, name)
    _believe(head, size, name)
    return _map(path, head, 0)


def _header(file: BinaryIO, name: str) -> _Header:
    """The header of an array.

    Raises:
        RecordingRefused: no header, or of objects.
    """
    try:
        version = np.lib.format.read_magic(file)
        if version == (1, 0):
            shape, fortran, dtype = np.lib.format.read_array_header_1_0(file)
        elif version == (2, 0):
            shape, fortran, dtype = np.lib.format.read_array_header_2_0(file)
        else:
            raise ValueError(f"array format {version[0]}.{version[1]}")
    except (ValueError, SyntaxError, TypeError, RecursionError, MemoryError) as error:
        raise refused(
            f"{name} does not hold a plain NumPy array: {clean(str(error), 80)}", _SAVE
        ) from None
    if dtype.hasobject:
        raise refused(f"{name} holds Python objects, which are not opened for safety", _SAVE)
    return _Header(shape, fortran, dtype, file.tell())


def _believe(head: _Header, size: int, name: str) -> None:
    """Refuse a header that promises more than there is."""
    want = head.dtype.itemsize
    if want == 0 or any(side < 0 for side in head.shape):
        raise refused(f"{name}: its header cannot be right: {head.shape}, {head.dtype}", _SAVE)
    for side in head.shape:
        want *= side  # plain integers: no overflow
    if want != size - head.length:
        raise refused(
            f"{name}: its header promises {want} bytes of samples, {size - head.length} are there",
            "copy the file again; it is cut or damaged",
        )


def _map(path: Path, head: _Header, offset: int) -> npt.NDArray[Any]:
    if 0 in head.shape:
        return np.empty(head.shape, head.dtype)
    return np.memmap(
        path, head.dtype, "r", offset + head.length, head.shape, "F" if head.fortran else "C"
    )


def _member(
    path: Path, archive: zipfile.ZipFile, info: zipfile.ZipInfo, name: str
) -> npt.NDArray[Any]:
    with archive.open(info) as stream:
        head = _header(stream, name)  # type: ignore[arg-type]  # reads as a binary file does
        _believe(head, info.file_size, name)
        if info.compress_type == zipfile.ZIP_STORED:
            return _map(path, head, _begin(path, info, name))
        if info.file_size > MOST_UNPACKED:
            raise refused(
                f"{name} would unpack to {info.file_size / 1e9:.1f} GB",
                "save it uncompressed with numpy.savez, then any length is read",
            )
        data = stream.read(info.file_size)
    flat = np.frombuffer(data, head.dtype, count=int(np.prod(head.shape)))
    return flat.reshape(head.shape, order="F" if head.fortran else "C")


def _begin(path: Path, info: zipfile.ZipInfo, name: str) -> int:
    """Where a stored member's bytes begin: its local header has two fields of variable length."""
    with path.open("rb") as file:
        file.seek(info.header_offset)
        local = file.read(30)
        if len(local) < 30 or local[:4] != b"PK\x03\x04":
            raise refused(f"{name} is damaged at byte {info.header_offset}", "copy it again")
        names, extra = struct.unpack("<HH", local[26:30])
    begin = int(info.header_offset) + 30 + int(names) + int(extra)
    if begin + info.file_size > path.stat().st_size:
        raise refused(f"{name} is cut short", "copy it again")
    return begin


def _small(archive: zipfile.ZipFile, info: zipfile.ZipInfo, name: str) -> npt.NDArray[Any]:
    """A small member, loaded. 1 MB is far beyond any list of names."""
    if info.file_size > 1 << 20:
        raise refused(
            f"{name}: {clean(info.filename)} is too large to be what its name says", _SAVE
        )
    file = io.BytesIO(archive.read(info))
    head = _header(file, name)
    _believe(head, info.file_size, name)
    return np.frombuffer(file.read(), head.dtype, count=int(np.prod(head.shape)))


def _rate(archive: zipfile.ZipFile, members: dict[str, zipfile.ZipInfo], name: str) -> float | None:
    if "rate.npy" not in members:
        return None
    value = _small(archive, members["rate.npy"], name)
    if value.size != 1 or value.dtype.kind not in "iuf":
        raise refused(f"{name}: `rate` is not one number", _SAVE)
    rate = float(value[0])
    if not (np.isfinite(rate) and rate > 0.0):
        raise refused(f"{name}: `rate` is {rate:g}, not a number above 0", _SAVE)
    return rate


def _words(
    archive: zipfile.ZipFile, members: dict[str, zipfile.ZipInfo], what: str, name: str
) -> list[str]:
    if f"{what}.npy" not in members:
        return []
    value = _small(archive, members[f"{what}.npy"], name)
    if value.dtype.kind not in "US":
        raise refused(f"{name}: `{what}` is not a list of texts", _SAVE)
    return [
        one.decode("utf-8", "replace") if isinstance(one, bytes) else str(one)
        for one in value.tolist()
    ]


def _channels_first(samples: npt.NDArray[Any], name: str) -> npt.NDArray[Any]:
    if samples.dtype.kind not in "iuf" or samples.dtype.itemsize > 8:
        raise refused(f"{name}: `samples` are {samples.dtype}, not plain numbers", _SAVE)
    if samples.ndim == 1:
        samples = samples[None, :]
    if samples.ndim != 2 or samples.size == 0:
        shape = " × ".join(map(str, samples.shape)) or "a single number"
        raise refused(f"{name}: `samples` is {shape}, not channels × n with something in it", _SAVE)
    if samples.shape[0] > MOST_CHANNELS or samples.shape[0] > max(8, 4 * samples.shape[1]):
        raise refused(
            f"{name}: `samples` is {samples.shape[0]} × {samples.shape[1]}, which reads as"
            f" {samples.shape[0]} channels of {samples.shape[1]} samples",
            "channels come first: save samples.T",
        )
    return samples
