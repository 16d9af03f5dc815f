"""NPZ and NPY: `samples` (channels x n, or n), `rate`, optional `names` and `units`. No pickle."""

import ast
import math
import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import IO, Any

import numpy as np

from acquisition.block import Block
from acquisition.recordings.faults import absent, damaged, refused
from acquisition.recordings.recording import RecordingOptions
from acquisition.stream import ChannelHint, StreamInfo, clean

SETS_AT_ONCE = 1 << 17
MOST_CHANNELS = 256


class NumpyRecording:
    """An array of samples on disk, mapped or read piece by piece."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Open it.

        Raises:
            RecordingAbsent, RecordingRefused: see `open_recording`.
        """
        self.path = path
        self._done = 0
        try:
            self.bytes_total = path.stat().st_size
            with path.open("rb") as file:
                zipped = file.read(2) == b"PK"
            entries = self._entries() if zipped else {"samples": self._mapped()}
        except OSError as error:
            raise absent(path, error) from None
        if "samples" not in entries:
            held = ", ".join(clean(name) for name in list(entries)[:8]) or "nothing"
            raise refused(
                path,
                f"has no array named samples; it holds {held}",
                "save it with numpy.savez(FILE, samples=…, rate=…)",
            )
        self._samples = self._checked(entries["samples"])
        channels, self._sets = self._samples.shape
        self.sets: int | None = self._sets
        rate = options.rate
        if rate is None and "rate" in entries:
            rate = self._one_number(entries["rate"])
        if rate is None:
            raise refused(path, "does not tell its sample rate", "give it with --rate HZ")
        names = self._texts(entries.get("names"), channels) or [
            f"ch{n}" for n in range(1, channels + 1)
        ]
        units = self._texts(entries.get("units"), channels) or [""] * channels
        self.info = StreamInfo(
            format="npz" if zipped else "npy",
            channels=tuple(
                ChannelHint(
                    name=clean(name) or f"ch{n}",
                    unit=clean(unit, 12),
                    gain=1.0 if unit else None,
                    step=1.0 if self._samples.dtype.kind in "iu" else None,
                )
                for n, (name, unit) in enumerate(zip(names, units, strict=True), 1)
            ),
            rate=rate,
            sample_type=str(self._samples.dtype.newbyteorder("=")),
        )

    def blocks(self) -> Iterator[Block]:
        """See Recording. Sets that are no numbers part the stream later, in scaling."""
        for at in range(0, self._sets, SETS_AT_ONCE):
            piece = self._samples[:, at : at + SETS_AT_ONCE]
            native = piece.astype(piece.dtype.newbyteorder("="), order="C")
            yield Block(codes=native, index=at)
            self._done = at + native.shape[1]

    def bytes_read(self) -> int:
        """See Recording."""
        return round(self.bytes_total * self._done / max(1, self._sets))

    def close(self) -> None:
        """See Recording."""

    def _mapped(self) -> np.ndarray[Any, np.dtype[Any]]:
        """An .npy file as a map; its header is compared with its size first."""
        with self.path.open("rb") as file:
            self._compare(file, self.bytes_total, self.path.name)
        try:
            mapped: np.ndarray[Any, np.dtype[Any]] = np.load(
                self.path, mmap_mode="r", allow_pickle=False
            )
        except (ValueError, EOFError) as error:
            raise refused(self.path, f"is no readable array ({clean(str(error), 100)})") from None
        return mapped

    def _entries(self) -> dict[str, np.ndarray[Any, np.dtype[Any]]]:
        """The arrays of an .npz that matter; each header is compared with its size first."""
        entries: dict[str, np.ndarray[Any, np.dtype[Any]]] = {}
        try:
            with zipfile.ZipFile(self.path) as archive:
                for item in archive.infolist():
                    name = item.filename.removesuffix(".npy")
                    if name not in ("samples", "rate", "names", "units"):
                        entries.setdefault(name, np.empty(0))
                        continue
                    with archive.open(item) as file:
                        self._compare(file, item.file_size, item.filename)
                    with archive.open(item) as file:
                        entries[name] = np.lib.format.read_array(file, allow_pickle=False)
        except zipfile.BadZipFile:
            raise refused(
                self.path, "is a damaged archive", "copy it again from its source"
            ) from None
        except (ValueError, EOFError, zipfile.zlib.error) as error:  # type: ignore[attr-defined]
            raise refused(
                self.path, f"holds an array that cannot be read ({clean(str(error), 100)})"
            ) from None
        return entries

    def _compare(self, file: IO[bytes], size: int, name: str) -> None:
        """Refuse a header that promises more than there is, before memory is asked for."""
        try:
            if file.read(6) != b"\x93NUMPY":
                raise ValueError("no array header")
            major = file.read(2)[0]
            width = 2 if major == 1 else 4
            length = int.from_bytes(file.read(width), "little")
            if length > 1 << 16:
                raise ValueError("a header of over 64 kB")
            header = ast.literal_eval(file.read(length).decode("latin-1").strip())
            dtype = np.dtype(header["descr"])
            promised = (
                int(np.prod([int(n) for n in header["shape"]], dtype=object)) * dtype.itemsize
            )
        except (ValueError, SyntaxError, KeyError, IndexError, TypeError) as error:
            raise refused(
                self.path, f"holds no array in {clean(name)} ({clean(str(error), 80)})"
            ) from None
        if dtype.hasobject:
            raise refused(
                self.path, "holds Python objects, which are not opened", "save plain numbers"
            )
        if promised > size:
            raise damaged(
                self.path,
                f"promises {promised} bytes in {clean(name)} and has {size}",
                "copy it again from its source",
            )

    def _checked(self, samples: np.ndarray[Any, np.dtype[Any]]) -> np.ndarray[Any, np.dtype[Any]]:
        if samples.dtype.kind not in "iuf":
            raise refused(self.path, f"holds {samples.dtype}, not numbers", "save plain numbers")
        if samples.ndim == 1:
            samples = samples[None, :]
        if samples.ndim != 2:
            raise refused(
                self.path, f"has samples of {samples.ndim} dimensions", "save channels x n"
            )
        if samples.shape[0] > MOST_CHANNELS and samples.shape[1] <= MOST_CHANNELS:
            samples = samples.T  # saved the other way round
        if samples.shape[0] > MOST_CHANNELS:
            raise refused(self.path, f"has {samples.shape[0]} channels", "save channels x n")
        if samples.shape[0] == 0 or samples.shape[1] == 0:
            raise refused(self.path, "holds no sample")
        return samples

    def _one_number(self, array: np.ndarray[Any, np.dtype[Any]]) -> float:
        rate = float(array.ravel()[0]) if array.size == 1 and array.dtype.kind in "iuf" else -1.0
        if not 0.0 < rate < 1e9:
            raise refused(self.path, "has a rate that is no number above 0", "give --rate HZ")
        return rate

    def _texts(
        self, array: np.ndarray[Any, np.dtype[Any]] | None, channels: int
    ) -> list[str] | None:
        if array is None:
            return None
        texts = [str(text) for text in array.ravel().tolist()]
        if len(texts) != channels:
            raise refused(
                self.path, f"names {len(texts)} channels or units and holds {channels} channels"
            )
        return texts
