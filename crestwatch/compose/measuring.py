"""A recording being measured offline."""

from collections.abc import Iterator, Mapping
from dataclasses import replace
from pathlib import Path

from acquisition.errors import RecordingError
from acquisition.recordings.recording import Recording
from acquisition.status import LinkState, ReaderStatus
from acquisition.stream import StreamInfo
from crestwatch.compose.sources import recording
from crestwatch.output import Described
from dsp.meters import BUILT_IN
from rig.channels import advice
from rig.setup import Setup
from rig.zero import needs_zero, with_zero
from shift.batch import Batch
from shift.engine import Engine
from shift.summary import Summary, with_run


class Measuring:
    """A recording being measured; whoever opens it closes it."""

    def __init__(self, recording: Recording, setup: Setup, rate: float | None) -> None:
        declared = rate or setup.rate_hz or recording.info.rate
        assert declared is not None  # every opened recording has a rate
        self.rate: float = declared
        info = recording.info
        if needs_zero(setup, info):
            first = next(recording.blocks(), None)
            if first is not None:
                info = with_zero(setup, info, first.codes)
        self.info: StreamInfo = info
        self.engine = Engine(setup, info, BUILT_IN)
        self.summaries = tuple(Summary(channel) for channel in self.engine.channels)
        self.notes = info.notes + advice(setup, self.engine.channels)
        self.bytes_total = recording.bytes_total
        self.damage: RecordingError | None = None
        self._recording = recording
        self._received = 0
        self._lost: int | None = 0

    def close(self) -> None:
        """Let go of the file."""
        self._recording.close()

    def described(self, source: str) -> Described:
        """What is being read, for an output."""
        return Described(source, self.info, self.rate, self.engine.channels, self.engine.nominal)

    def bytes_read(self) -> int:
        """How far reading has come."""
        return self._recording.bytes_read()

    def status(self) -> ReaderStatus:
        """The account so far, in the shape of a reader's."""
        base = ReaderStatus(
            state=LinkState.FINISHED, link=str(self._recording.path), info=self.info
        )
        tally = replace(base.tally, received=self._received, lost=self._lost)
        return replace(base, tally=tally)

    def batches(self) -> Iterator[Batch]:
        """Measure the whole recording; what is damaged ends it and is kept as `damage`."""
        try:
            for block in self._recording.blocks():
                self._received += block.sets
                if block.lost_before is None:
                    self._lost = None
                elif self._lost is not None:
                    self._lost += block.lost_before
                yield from map(self._counted, self.engine.feed(block, self.rate))
        except RecordingError as error:
            self.damage = error
        yield from map(self._counted, self.engine.finish())

    def _counted(self, batch: Batch) -> Batch:
        if len(batch.readings):
            codes = batch.shown[0].codes
            self.summaries = tuple(
                with_run(summary, batch.readings, codes, c, self.engine.lost_seconds)
                for c, summary in enumerate(self.summaries)
            )
        return batch


def open_measuring(
    path: Path,
    setup: Setup,
    rate: float | None,
    scale: Mapping[str, tuple[float, str]],
    format_: str | None,
) -> Measuring:
    """Open a recording to be measured.

    Raises:
        RecordingError: it is missing or is no recording of a known kind.
        SetupError: the setup names a channel that the recording lacks.
    """
    return Measuring(recording(path, rate or setup.rate_hz, scale, format_), setup, rate)
