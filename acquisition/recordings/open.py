"""Opens a recording by what it is: its content first, its name where the content does not tell."""

from pathlib import Path

from acquisition.recordings.faults import absent, refused
from acquisition.recordings.recording import Recording, RecordingOptions

_TABLES = (".csv", ".tsv", ".txt")


def open_recording(path: Path, options: RecordingOptions) -> Recording:
    """Open a recording.

    Args:
        path: a CSV, WAV, FLAC, NPZ, NPY or COMTRADE `.cfg` file, or a logger's captured bytes.
        options: what the file may not say itself.
    Raises:
        RecordingAbsent: it is not there or may not be read.
        RecordingRefused: it is no recording of a known kind.
    """
    try:
        if path.is_dir():
            raise IsADirectoryError
        with path.open("rb") as file:
            head = file.read(4096)
    except (OSError, ValueError) as error:
        raise absent(path, error if isinstance(error, OSError) else OSError(str(error))) from None
    if not head:
        raise refused(path, "is empty", "record again; nothing was written to it")
    suffix = path.suffix.lower()
    if options.format is not None:
        from acquisition.recordings.capture import CaptureRecording

        return CaptureRecording(path, options)
    if suffix in (".cfg", ".cff", ".dat", ".hdr", ".inf") and suffix != ".cff":
        cfg = _beside(path, ".cfg")
        if suffix in (".cfg",) or cfg is not None:
            from acquisition.recordings.comtrade import ComtradeRecording

            return ComtradeRecording(cfg or path, options)
    if head[:4] in (b"RIFF", b"RIFX", b"RF64") or suffix == ".wav":
        from acquisition.recordings.wav import open_wav

        return open_wav(path, options)
    if head[:4] == b"fLaC" or suffix == ".flac":
        from acquisition.recordings.wav import SoundRecording

        return SoundRecording(path, options)
    if head[:6] == b"\x93NUMPY" or head[:2] == b"PK" or suffix in (".npz", ".npy"):
        from acquisition.recordings.npz import NumpyRecording

        return NumpyRecording(path, options)
    if suffix == ".cff":
        raise refused(
            path,
            "is a COMTRADE file in one piece, which is not read here",
            "export it as a .cfg with its .dat",
        )
    if suffix in _TABLES:
        from acquisition.recordings.csv_table import CsvRecording

        return CsvRecording(path, options)
    from acquisition.recordings.capture import CaptureRecording

    return CaptureRecording(path, options)


def _beside(path: Path, suffix: str) -> Path | None:
    """The file of the same name with another suffix, however it is spelled."""
    for candidate in (path.with_suffix(suffix), path.with_suffix(suffix.upper())):
        if candidate.is_file():
            return candidate
    return None


def described(head: bytes) -> str:
    """The first bytes of something unknown, fit to be printed."""
    text = "".join(chr(b) if 32 <= b < 127 else "." for b in head[:24])
    return f"{head[:8].hex(' ')} ({text})"
