"""What goes wrong, said once: stderr, exit codes, and which error means which code.

stdout is data, stderr is talk. A message names the thing first, then what to do; a bad input
never shows a traceback.
"""

import sys
from collections.abc import Iterable

DONE = 0
CHECK_FAILED = 1
WRONG_USAGE = 2
SOURCE_LOST = 3
DATA_UNREADABLE = 4
CANNOT_WRITE = 5
INTERRUPTED = 130


class UsageError(Exception):
    """The command line asks for something that does not exist or does not go together."""


class CannotWrite(Exception):
    """An output could not be written."""


def say(message: str, advice: Iterable[str] = ()) -> None:
    """Tell the person on stderr: one sentence, then one line for each thing to try."""
    lines = [f"crestwatch: {_harmless(message)}"]
    lines += [f"  try: {_harmless(note)}" for note in advice]
    sys.stderr.write("\n".join(lines) + "\n")
    sys.stderr.flush()


def note(message: str) -> None:
    """A remark on stderr that is no fault: a line skipped, a guess made."""
    sys.stderr.write(f"crestwatch: {_harmless(message)}\n")
    sys.stderr.flush()


def explain(error: BaseException) -> int:
    """Say what an error means and return its exit code; re-raises what is a bug of ours."""
    if isinstance(error, KeyboardInterrupt):
        return INTERRUPTED
    code = _code_of(error)
    if code is None:
        raise error
    say(_sentence(error), getattr(error, "__notes__", ()))
    return code


def _code_of(error: BaseException) -> int | None:
    # The rooms are imported here, not above, so that `--help` stays light.
    from acquisition import errors as acquisition_errors
    from rig import errors as rig_errors

    if isinstance(error, UsageError | rig_errors.RigError):
        return WRONG_USAGE
    if isinstance(error, CannotWrite):
        return CANNOT_WRITE
    if isinstance(error, acquisition_errors.RecordingAbsent | acquisition_errors.LinkError):
        return SOURCE_LOST
    if isinstance(error, acquisition_errors.AcquisitionError):
        return DATA_UNREADABLE
    if isinstance(error, OSError):
        return SOURCE_LOST
    if isinstance(error, MemoryError):
        return DATA_UNREADABLE
    return None


def _sentence(error: BaseException) -> str:
    if isinstance(error, OSError):
        where = f"{error.filename}: " if error.filename else ""
        return f"{where}{error.strerror or error}"
    if isinstance(error, MemoryError):
        return "there is not enough memory for this"
    return str(error)


def _harmless(text: str) -> str:
    """No control character from outside reaches the terminal, wherever a name slipped through."""
    return "".join(c if c.isprintable() else " " for c in text)
