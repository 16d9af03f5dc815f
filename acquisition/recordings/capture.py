"""A logger's own bytes as captured to a file, read through the same decoders as a live stream."""

from collections.abc import Iterator
from pathlib import Path

from acquisition.autodecode import AutoDecoder
from acquisition.block import Block
from acquisition.recordings.faults import absent, refused
from acquisition.recordings.recording import RecordingOptions
from acquisition.stream import StreamInfo

PIECE = 1 << 20  # bytes
SNIFFED = 4 << 20  # bytes in which a format must show


class CaptureRecording:
    """Captured bytes."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Find out the format and the rate.

        Raises:
            RecordingAbsent: it may not be read.
            RecordingRefused: it is no stream of samples, or does not tell its rate.
        """
        self.path = path
        self.sets: int | None = None
        self._options = options
        self._done = 0
        try:
            self.bytes_total = path.stat().st_size
            info = self._find()
        except OSError as error:
            raise absent(path, error) from None
        rate = options.rate or info.rate
        if rate is None:
            raise refused(
                path,
                f"is a capture of a {info.format} stream, which does not tell its sample rate",
                "give it with --rate HZ",
            )
        import dataclasses

        self.info = dataclasses.replace(info, rate=rate)

    def blocks(self) -> Iterator[Block]:
        """See Recording."""
        decoder = self._decoder()
        with self.path.open("rb") as file:
            while data := file.read(PIECE):
                yield from decoder.feed(data, 0.0)
                self._done += len(data)
        yield from decoder.finish()

    def bytes_read(self) -> int:
        """See Recording."""
        return self._done

    def close(self) -> None:
        """See Recording."""

    def _decoder(self) -> AutoDecoder:
        return AutoDecoder(self._options.format, rate=self._options.rate)

    def _find(self) -> StreamInfo:
        decoder = self._decoder()
        read = 0
        with self.path.open("rb") as file:
            while (data := file.read(1 << 16)) and read < SNIFFED:
                decoder.feed(data, 0.0)
                read += len(data)
                if decoder.info is not None and (decoder.info.rate or read > 1 << 18):
                    return decoder.info
        decoder.finish()
        if decoder.info is not None:
            return decoder.info
        raise refused(
            self.path,
            decoder.problem or "is no recording and no stream of samples that is known",
            "name a CSV, WAV, FLAC, NPZ, NPY or COMTRADE .cfg file, or a logger's captured bytes",
            "give --format crestwire, text or raw if it is a capture",
        )
