"""The errors of a recording, each with its advice."""

from pathlib import Path

from acquisition.errors import RecordingAbsent, RecordingDamaged, RecordingRefused
from acquisition.stream import clean


def shown(path: Path) -> str:
    """A path fit to be printed."""
    return clean(str(path), 160)


def absent(path: Path, error: OSError) -> RecordingAbsent:
    """The file cannot be opened at all."""
    if isinstance(error, FileNotFoundError):
        found = RecordingAbsent(f"there is no file {shown(path)}")
        found.add_note("check the path; `ls` shows what is there")
    elif isinstance(error, IsADirectoryError):
        found = RecordingAbsent(f"{shown(path)} is a folder, not a recording")
        found.add_note("name a file in it")
    elif isinstance(error, PermissionError):
        found = RecordingAbsent(f"{shown(path)} may not be read by this user")
        found.add_note("change its permissions, or copy it to a folder of your own")
    else:
        found = RecordingAbsent(f"{shown(path)}: {error.strerror or error}")
    return found


def refused(path: Path, what: str, *advice: str) -> RecordingRefused:
    """The file is not a recording that can be read."""
    found = RecordingRefused(f"{shown(path)}: {what}")
    for note in advice:
        found.add_note(note)
    return found


def damaged(path: Path, what: str, *advice: str) -> RecordingDamaged:
    """Good as far as it was read."""
    found = RecordingDamaged(f"{shown(path)}: {what}")
    found.add_note("what was measured before this place stands")
    for note in advice:
        found.add_note(note)
    return found
