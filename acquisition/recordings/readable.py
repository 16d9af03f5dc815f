"""Whether a file can be read at all, and the errors of this room in one shape.

Every refusal is one sentence (what, and where) with the advice as notes.
"""

import os
import stat
from pathlib import Path
from typing import TypeVar

from acquisition.errors import RecordingAbsent, RecordingDamaged, RecordingError, RecordingRefused
from acquisition.stream import clean

E = TypeVar("E", bound=RecordingError)


def shown(path: Path) -> str:
    """A path fit for a sentence."""
    return clean(str(path), 120)


def refused(sentence: str, *advice: str) -> RecordingRefused:
    """The file is no recording, or two readings fit. To be raised by the caller."""
    return _noted(RecordingRefused(sentence), advice)


def damaged(sentence: str, *advice: str) -> RecordingDamaged:
    """Good so far, but not further. To be raised by the caller."""
    return _noted(RecordingDamaged(sentence), advice)


def size_of(path: Path) -> int:
    """Size of a file that is there, may be read and holds something. [bytes]

    Raises:
        RecordingAbsent: missing, a folder, or not to be read by this user.
        RecordingRefused: a pipe, an empty file.
    """
    name = shown(path)
    try:
        status = path.stat()
        if stat.S_ISDIR(status.st_mode):
            raise _noted(
                RecordingAbsent(f"{name} is a folder, not a recording"), ("name a file in it",)
            )
        if not stat.S_ISREG(status.st_mode):
            raise refused(
                f"{name} is no ordinary file, so it cannot be measured as a recording",
                "save what comes from it to a file first, or use `crestwatch watch`",
            )
        with path.open("rb"):
            pass
    except (FileNotFoundError, NotADirectoryError):
        raise _absent(path) from None
    except PermissionError:
        raise _noted(
            RecordingAbsent(f"{name} may not be read by this user"),
            (f"ask its owner, or allow it with: chmod u+r {name}",),
        ) from None
    except (OSError, ValueError) as error:  # ValueError: a NUL in the name
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise _noted(
            RecordingAbsent(f"{name} cannot be opened: {reason}"), ("check the name and the disk",)
        ) from None
    if status.st_size == 0:
        raise refused(f"{name} is empty", "check that the recording had finished and was copied")
    return status.st_size


def begins(head: bytes) -> str:
    """How a file begins, in words: readable text as such, else bytes in hex."""
    text = head[:24].decode("latin-1")
    if text.isascii() and all(c.isprintable() or c in "\r\n\t" for c in text):
        return "the text " + repr(text.split("\n", maxsplit=1)[0].strip("\r"))
    return "the bytes " + head[:8].hex(" ")


def beside(path: Path, suffix: str) -> Path | None:
    """The file of the same name with another suffix, in small or capital letters; None: none."""
    exact = path.with_suffix(suffix)
    if exact.is_file():
        return exact
    try:
        near = [p for p in path.parent.iterdir() if p.suffix.lower() == suffix]
    except OSError:
        return None
    return next((p for p in near if p.stem.lower() == path.stem.lower() and p.is_file()), None)


def unreadable(path: Path, error: OSError) -> RecordingError:
    """What to raise when reading stops on a fault of the disk or its connection."""
    reason = error.strerror or os.strerror(error.errno or 0)
    return damaged(f"{shown(path)} cannot be read further: {reason}", "copy the file and try again")


def _absent(path: Path) -> RecordingAbsent:
    error = RecordingAbsent(f"there is no file {shown(path)}")
    try:
        stem = path.stem.lower()
        near = sorted(p.name for p in path.parent.iterdir() if p.stem.lower() == stem)[:3]
    except OSError:
        near = []
    if near:
        error.add_note(f"near it there is {', '.join(clean(name) for name in near)}")
    else:
        error.add_note("check the name and the directory")
    return error


def _noted(error: E, advice: tuple[str, ...]) -> E:
    for note in advice:
        error.add_note(note)
    return error
