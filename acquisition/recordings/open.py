"""Opens a recording of whatever kind: by what the file begins with, then by its name."""

from pathlib import Path

from acquisition.recordings.readable import begins, beside, refused, shown, size_of
from acquisition.recordings.recording import Recording, RecordingOptions

CAPTURE_FORMATS = ("crestwire", "text", "raw")
_TABLE_NAMES = (".csv", ".tsv", ".txt")

# Files that people have at hand and that are no samples as they stand: how they begin, what they
# are, what to do. (Magic numbers from memory, not read.)
_OTHER_KINDS = (
    (b"\x1f\x8b", "compressed (gzip)", "unpack it first"),
    (b"BZh", "compressed (bzip2)", "unpack it first"),
    (b"\xfd7zXZ", "compressed (xz)", "unpack it first"),
    (b"\x28\xb5\x2f\xfd", "compressed (zstd)", "unpack it first"),
    (b"7z\xbc\xaf", "a packed archive", "unpack it first"),
    (b"PK\x03\x04", "a packed archive or a spreadsheet", "unpack it, or export it as CSV"),
    (b"\xd0\xcf\x11\xe0", "a spreadsheet or office file", "export it as CSV"),
    (b"SQLite format 3\0", "a database", "if it is a logbook: crestwatch review"),
    (b"\x89HDF", "HDF5", "export it as CSV or NPZ"),
    (b"PAR1", "Parquet", "export it as CSV or NPZ"),
    (b"MATLAB 5.0", "a MATLAB file", "export it as CSV or NPZ"),
    (b"%PDF", "a PDF", "name the recording itself"),
    (b"\x89PNG", "a picture", "name the recording itself"),
    (b"\xff\xd8\xff", "a picture", "name the recording itself"),
    (b"\x7fELF", "a program", "name the recording itself"),
    (b"OggS", "compressed sound (Ogg)", "record WAV or FLAC, which lose nothing"),
    (b"ID3", "compressed sound (MP3)", "record WAV or FLAC, which lose nothing"),
)


def open_recording(path: Path, options: RecordingOptions) -> Recording:
    """Open a recording; its `info.rate` is known.

    Raises:
        RecordingAbsent: there is no such file, or it may not be read.
        RecordingRefused: it is not a recording of a known kind, two readings of it fit, or
            something must be told (`--rate`). The notes say what to do.
    """
    size_of(path)
    with path.open("rb") as file:
        head = file.read(4096)
    suffix = path.suffix.lower()
    opened = _by_content(path, options, head, suffix) or _by_name(path, options, head, suffix)
    if opened is not None:
        return opened
    from acquisition.recordings.capture import CaptureRecording

    return CaptureRecording(path, options)


def _by_content(
    path: Path, options: RecordingOptions, head: bytes, suffix: str
) -> Recording | None:
    name = shown(path)
    if (options.format or "").partition(":")[0] in CAPTURE_FORMATS:
        from acquisition.recordings.capture import CaptureRecording

        return CaptureRecording(path, options)
    if options.format is not None:
        raise refused(
            f"--format {options.format} is no format of captured bytes",
            f"there are {', '.join(CAPTURE_FORMATS)}; files of other kinds are told apart by"
            " themselves",
        )
    if head[:4] in (b"RIFF", b"RF64", b"RIFX"):
        from acquisition.recordings.wav import WavRecording

        return WavRecording(path, options)
    _only_sound_has_full_scale(options, name, head)
    if head[:4] == b"fLaC":
        from acquisition.recordings.flac import FlacRecording

        return FlacRecording(path, options)
    if head[:6] == b"\x93NUMPY" or (head[:4] == b"PK\x03\x04" and suffix == ".npz"):
        from acquisition.recordings.npz import NpzRecording

        return NpzRecording(path, options)
    for magic, what, advice in _OTHER_KINDS:
        if head.startswith(magic):
            raise refused(f"{name} is {what}, not a recording", advice)
    return None


def _by_name(path: Path, options: RecordingOptions, head: bytes, suffix: str) -> Recording | None:
    name = shown(path)
    if suffix in (".cfg", ".cff") or (suffix == ".dat" and beside(path, ".cfg")):
        from acquisition.recordings.comtrade import ComtradeRecording

        return ComtradeRecording(path, options)
    if suffix in _TABLE_NAMES:
        from acquisition.recordings.csv_table import CsvRecording

        return CsvRecording(path, options)
    kinds = {".wav": "WAV", ".flac": "FLAC", ".npz": "NPZ", ".npy": "NPY"}
    if suffix in kinds:
        raise refused(
            f"{name} is named as {kinds[suffix]} but begins with {begins(head)}",
            "check that it was copied whole, or give it its right name",
        )
    return None


def _only_sound_has_full_scale(options: RecordingOptions, name: str, head: bytes) -> None:
    if options.scale and head[:4] != b"fLaC":
        raise refused(
            f"--scale is for WAV and FLAC, and {name} is neither",
            "give the gain of each channel in a setup instead",
        )
