"""A logger's own bytes, captured to a file: decoded as they would have been live."""

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

from acquisition.autodecode import AutoDecoder
from acquisition.block import Block
from acquisition.recordings.readable import begins, damaged, refused, shown, size_of, unreadable
from acquisition.recordings.recording import RecordingOptions
from acquisition.stream import StreamInfo

PIECE = 1 << 18  # bytes
# A crestwire logger tells its rate once a second; 16 MB hold some seconds of the fastest.
LOOKED_AT = 16 << 20  # bytes, until the format and the rate must have shown
ENOUGH = 1 << 18  # bytes after which a format without a rate is not going to tell it


class CaptureRecording:
    """Captured bytes as Blocks, with the decoder's own account of what is missing."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Find out what the bytes are.

        Raises:
            RecordingAbsent, RecordingRefused: not to be read, no stream of samples, or the rate
                must be told.
            NotSamples: the format that was asked for does not exist.
        """
        self.path = path
        self.bytes_total = size_of(path)
        self.sets: int | None = None
        self._options = options
        self._done = 0
        name = shown(path)
        found = self._look(name)
        rate = options.rate or found.rate
        if rate is None:
            raise refused(
                f"{name} holds a {found.format} stream, which does not tell its sample rate",
                "tell it, for example: --rate 8000",
            )
        self.info = replace(found, rate=rate)

    def blocks(self) -> Iterator[Block]:
        """Blocks in order. Raises RecordingDamaged on a fault of the disk."""
        decoder = self._decoder()
        self._done = 0
        given = 0
        try:
            with self.path.open("rb") as file:
                while data := file.read(PIECE):
                    self._done += len(data)
                    for block in decoder.feed(data, float("nan")):
                        given += block.sets
                        yield block
        except OSError as error:
            raise unreadable(self.path, error) from None
        for block in decoder.finish():
            given += block.sets
            yield block
        if not given:
            raise damaged(
                decoder.problem or f"{shown(self.path)} holds no whole sample",
                "check that the capture is whole; `crestwatch identify` shows what it looks like",
            )

    def bytes_read(self) -> int:
        """How far reading has come."""
        return self._done

    def close(self) -> None:
        """Nothing stays open."""

    def _decoder(self) -> AutoDecoder:
        options = self._options
        return AutoDecoder(
            options.format,
            rate=options.rate,
            channels=options.channels,
            byte_order=options.byte_order,
        )

    def _look(self, name: str) -> StreamInfo:
        """What the first bytes say of the stream."""
        decoder = self._decoder()
        read = 0
        try:
            with self.path.open("rb") as file:
                head = file.read(64)
                file.seek(0)
                while read < LOOKED_AT and (data := file.read(1 << 16)):
                    read += len(data)
                    decoder.feed(data, float("nan"))
                    info = decoder.info
                    if info is not None and (
                        info.rate or self._options.rate or self._settled(info, read)
                    ):
                        return info
        except OSError as error:
            raise unreadable(self.path, error) from None
        decoder.finish()
        if decoder.info is not None:
            return decoder.info
        raise _unknown(name, head, decoder.problem)

    def _settled(self, info: StreamInfo, read: int) -> bool:
        return info.format != "crestwire" and read >= ENOUGH


def _unknown(name: str, head: bytes, problem: str) -> Exception:
    if problem.startswith("this looks like raw"):
        return refused(f"{name}: {problem}")
    return refused(
        f"{name} is no recording of a known kind and no stream of samples; it begins with"
        f" {begins(head)}",
        "known are CSV, WAV, FLAC, NPZ, NPY, COMTRADE (.cfg) and a logger's captured bytes",
        "if a logger sent it, tell which: --format crestwire, text or raw:u16:2:little",
    )
