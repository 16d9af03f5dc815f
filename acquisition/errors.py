"""What can go wrong on the way from a source to Blocks.

Each error keeps its facts as attributes and its advice as a note (`__notes__`); the command line
prints both. No error here knows of exit codes.
"""


class AcquisitionError(Exception):
    """Anything this room raises on purpose."""


class LinkError(AcquisitionError):
    """A connection could not be made or kept."""


class LinkAbsent(LinkError):
    """There is no such port, host or file."""


class LinkBusy(LinkError):
    """Another program holds it."""


class LinkForbidden(LinkError):
    """This user may not open it."""


class LinkUnusable(LinkError):
    """It opened but is not what was asked for (not a serial port, a refused setting)."""


class LinkLost(LinkError):
    """It was open and broke: unplugged, reset, closed by the far end. May come back."""


class LinkFinished(LinkError):
    """A bounded source has given all it had. Not a fault."""


class LinkClosed(LinkError):
    """We closed it ourselves. Not a fault."""


class NotSamples(AcquisitionError):
    """The bytes are no stream of samples that this program knows."""


class RecordingError(AcquisitionError):
    """A recording cannot be read, wholly or from a place on."""


class RecordingAbsent(RecordingError):
    """There is no such file, or it may not be read."""


class RecordingRefused(RecordingError):
    """The file is not a recording of a known kind, or two readings of it fit."""


class RecordingDamaged(RecordingError):
    """Good as far as it was read; what was yielded before this stands."""
