"""FLAC recordings, decoded by the soundfile package (the extra `sound`)."""

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from acquisition.block import Block
from acquisition.recordings.placing import SETS_AT_A_TIME, Placer
from acquisition.recordings.readable import damaged, refused, shown, size_of
from acquisition.recordings.recording import RecordingOptions
from acquisition.recordings.wav import chosen_rate, full_scale, pcm_hint
from acquisition.stream import StreamInfo

_BITS = {"PCM_S8": 8, "PCM_16": 16, "PCM_24": 24}


class FlacRecording:
    """A FLAC file as Blocks of integer codes."""

    def __init__(self, path: Path, options: RecordingOptions) -> None:
        """Open and read the header.

        Raises:
            RecordingAbsent, RecordingRefused: not to be read, not such a file, or no decoder.
        """
        self.path = path
        self.bytes_total = size_of(path)
        name = shown(path)
        try:
            import soundfile
        except (ImportError, OSError):  # OSError: its C library is missing
            raise refused(
                f"{name} is FLAC, which needs the soundfile package",
                "pip install 'crestwatch[sound]', or save the recording as WAV",
            ) from None
        self._fault: type[Exception] = soundfile.SoundFileError
        try:
            self._file: Any = soundfile.SoundFile(str(path))
        except self._fault as error:
            raise refused(
                f"{name} cannot be decoded as FLAC: {str(error).rsplit(': ', 1)[-1]}",
                "a FLAC cut while recording cannot be opened; record WAV where that matters",
            ) from None
        # libsndfile gives the widest count it knows for a stream that does not tell.
        self.sets: int | None = self._file.frames if self._file.frames < 1 << 50 else None
        bits = _BITS.get(self._file.subtype)
        if bits is None:
            self._file.close()
            raise refused(f"{name}: {self._file.subtype} samples are not read", "save it as WAV")
        self._bits = bits
        if self.sets == 0:
            self._file.close()
            raise refused(f"{name} holds no samples", "check that the recording had finished")
        names = [f"ch{k + 1}" for k in range(self._file.channels)]
        try:
            scale = full_scale(options, names, name)
        except BaseException:
            self._file.close()
            raise
        notes: list[str] = []
        # The decoder widens to 16 or 32 bits; `blocks` shifts back. 8 bits are signed in FLAC.
        self.info = StreamInfo(
            format="flac",
            channels=tuple(pcm_hint(one, bits, scale.get(one)) for one in names),
            rate=chosen_rate(options, float(self._file.samplerate), notes),
            sample_type=f"i{bits}",
            bits=bits,
            notes=tuple(notes),
        )
        self._done = 0

    def blocks(self) -> Iterator[Block]:
        """Blocks in order. Raises RecordingDamaged where decoding fails."""
        placer = Placer()
        name = shown(self.path)
        self._done = 0
        wide = "int16" if self._bits <= 16 else "int32"
        spare = (16 if self._bits <= 16 else 32) - self._bits
        try:
            self._file.seek(0)
            while True:
                part = self._file.read(SETS_AT_A_TIME, dtype=wide, always_2d=True)
                if not len(part):
                    break
                codes = np.ascontiguousarray(part.T)
                if spare:
                    codes >>= spare
                self._done += len(part)
                yield placer.place(codes)
        except self._fault as error:
            raise damaged(
                f"{name} cannot be decoded beyond set {self._done}: {error}",
                "what is there was read",
            ) from None
        if self.sets is not None and self._done < self.sets:
            raise damaged(
                f"{name} is cut short: its header promises {self.sets} sets, it holds {self._done}",
                "what is there was read",
            )

    def bytes_read(self) -> int:
        """How far reading has come: in proportion, as the decoder does not tell."""
        return round(self.bytes_total * self._done / self.sets) if self.sets else 0

    def close(self) -> None:
        """Let go of the file."""
        self._file.close()
