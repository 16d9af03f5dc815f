"""The only joiner of rooms: picks concrete parts and hands them to each other.

It neither computes nor draws. What a command needs of several rooms at once is built here.
"""

from collections.abc import Callable, Iterator, Mapping
from dataclasses import replace
from pathlib import Path
from types import TracebackType
from typing import Self

from acquisition.autodecode import AutoDecoder
from acquisition.errors import RecordingError
from acquisition.link import Link
from acquisition.links import pace
from acquisition.reader import Reader
from acquisition.recordings.open import open_recording
from acquisition.recordings.recording import Recording, RecordingOptions
from acquisition.recordings.replay import Replay
from acquisition.status import LinkState, ReaderStatus
from acquisition.stream import StreamInfo, clean
from crestwatch import diagnostics
from crestwatch.diagnostics import UsageError
from crestwatch.source import FileSource, SerialSource, SimSource, Source, TcpSource
from dsp.meters import BUILT_IN
from rig.setup import Setup
from rig.setup import load as load_setup
from shift.engine import Batch, Engine
from shift.live import Live, WatchPlan
from shift.summary import Summary, with_run
from sim import device as sim_device
from sim import scenes as sim_scenes
from sim.device import LoggerSpec
from sim.faults import parse as parse_faults

DEFAULT_BAUD = 115200  # what most boards' examples use; USB boards ignore it


def setup_for(path: Path | None, nominal: float | None, limit_pct: float | None) -> Setup:
    """The setup in a file, or none, with what the command line overrides.

    Raises:
        SetupError: the file is not a setup; the message names the line.
    """
    setup = load_setup(path) if path is not None else Setup.empty()
    if nominal is not None:
        setup = replace(setup, nominal_hz=nominal)
    if limit_pct is not None:
        setup = replace(setup, limit=limit_pct / 100.0)
    return setup


class Watch:
    """An opened live watch; a context manager that closes its source."""

    def __init__(self, source: "Reader | Replay", plan: WatchPlan) -> None:
        self._source = source
        self.live = Live(source, plan)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.live.stop()
        self._source.stop()

    def status(self) -> ReaderStatus:
        """The reader's latest state."""
        return self._source.status

    def outcome(self) -> int:
        """The exit code, and what there is to say at the end on stderr."""
        if self.live.failure is not None:
            return diagnostics.explain(self.live.failure)
        status = self._source.status
        damage = getattr(self._source, "damage", None)
        if damage is not None:
            return diagnostics.explain(damage)
        if status.state is LinkState.FAILED:
            diagnostics.say(status.problem or "the source is lost for good", status.advice)
            return diagnostics.SOURCE_LOST
        if self.live.engine is None:
            if status.bytes_received:
                diagnostics.say(
                    status.problem or "what came is no stream of samples that this program knows",
                    status.advice
                    or ("`crestwatch identify` tells what it looks like, and why not",),
                )
                return diagnostics.DATA_UNREADABLE
            diagnostics.say(
                f"nothing came from {status.link}",
                ("check the cable, the baud rate and that the logger is sending",),
            )
            return diagnostics.SOURCE_LOST
        return diagnostics.DONE


def open_watch(
    source: Source,
    text: str,
    setup: Setup,
    *,
    setup_name: str = "",
    rate: float | None = None,
    scale: Mapping[str, float] | None = None,
    format_: str | None = None,
    speed: float = 1.0,
    baud: int | None = None,
) -> Watch:
    """Open a source for watching.

    Raises:
        UsageError: an option does not fit the source.
        LinkError, RecordingError: it cannot be opened.
    """
    plan = WatchPlan(clean(text, 60), setup, BUILT_IN, rate, clean(setup_name))
    if isinstance(source, FileSource):
        return Watch(Replay(_recording(source.path, rate, scale, format_), speed), plan)
    decoder = AutoDecoder(format_ or setup.format, rate=rate)
    opener = _opener(source, setup, speed, baud)
    reader = Reader(opener, decoder, reconnect=not isinstance(source, SimSource))
    reader.start()
    return Watch(reader, plan)


class Measuring:
    """A recording being measured; a context manager that closes the file."""

    def __init__(self, recording: Recording, setup: Setup, rate: float | None) -> None:
        declared = rate or setup.rate_hz or recording.info.rate
        assert declared is not None  # every opened recording has a rate
        self.rate: float = declared
        self.info: StreamInfo = recording.info
        self.engine = Engine(setup, recording.info, BUILT_IN)
        self.summaries = tuple(Summary(channel) for channel in self.engine.channels)
        self.notes = recording.info.notes
        self.bytes_total = recording.bytes_total
        self.damage: RecordingError | None = None
        self._recording = recording
        self._received = 0
        self._lost: int | None = 0

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._recording.close()

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
    scale: Mapping[str, float],
    format_: str | None,
) -> Measuring:
    """Open a recording to be measured.

    Raises:
        RecordingError: it is missing or is no recording of a known kind.
        SetupError: the setup names a channel that the recording lacks.
    """
    return Measuring(_recording(path, rate, scale, format_), setup, rate)


def _recording(
    path: Path, rate: float | None, scale: Mapping[str, float] | None, format_: str | None
) -> Recording:
    return open_recording(
        path, RecordingOptions(rate=rate, scale=dict(scale or {}), format=format_)
    )


def _opener(source: Source, setup: Setup, speed: float, baud: int | None) -> Callable[[], Link]:
    """How to open the source, now and again after a loss."""
    if isinstance(source, SimSource):
        spec = _sim_spec(source)
        return lambda: pace.Paced(sim_device.frames(spec), f"sim:{source.scene}", speed)
    if isinstance(source, TcpSource):
        from acquisition.links.tcp import TcpLink

        return lambda: TcpLink(source.host, source.port)
    assert isinstance(source, SerialSource)
    from acquisition.links.serial_port import SerialLink

    rate = baud or _baud(source.options.get("baud")) or setup.baud or DEFAULT_BAUD
    return lambda: SerialLink(source.device, rate)


def _sim_spec(source: SimSource) -> LoggerSpec:
    """A simulated logger from `sim:SCENE?key=value&…`; keys are those of `simulate`."""
    options = dict(source.options)

    def number(key: str, usual: float) -> float:
        text = options.pop(key, None)
        if text is None:
            return usual
        try:
            return float(text)
        except ValueError:
            raise UsageError(f"sim: {key}={clean(text, 30)} is not a number") from None

    rate = number("rate", 0.0)
    spec = logger_spec(
        source.scene,
        wire=options.pop("wire", "crestwire"),
        rate=rate or None,
        bits=int(number("bits", 12)),
        noise=number("noise", 0.5),
        ppm=number("ppm", 0.0),
        drift=number("drift", 0.0),
        seed=int(number("seed", 1)),
        faults=options.pop("faults", ""),
    )
    if options:
        error = UsageError(
            f"sim: {clean(next(iter(options)), 30)} is no option of a simulated logger"
        )
        error.add_note("there are wire, rate, bits, noise, ppm, drift, seed and faults")
        raise error
    return spec


def logger_spec(
    scene: str,
    *,
    wire: str = "crestwire",
    rate: float | None = None,
    bits: int = 12,
    noise: float = 0.5,
    ppm: float = 0.0,
    drift: float = 0.0,
    seed: int = 1,
    faults: str = "",
) -> LoggerSpec:
    """A simulated logger.

    Raises:
        SimError: there is no such scene, or a fault does not read.
    """
    found = sim_scenes.find(scene)
    # Text is long: at 8000 sets a second it would not fit a common serial line.
    usual = 2000.0 if wire == "text" else 8000.0
    spec = LoggerSpec(
        scene=found,
        format=wire,
        rate=rate or usual,
        bits=bits,
        noise_codes=noise,
        clock_ppm=ppm,
        drift_ppm=drift,
        seed=seed,
        sets_per_frame=32 if wire == "text" else 64,
        faults=parse_faults(faults),
    )
    sim_device.check(spec)
    return spec


def scene_list() -> list[tuple[str, str, str]]:
    """(name, title, description) of every scene."""
    scenes = [make() for make in sim_scenes.SCENES.values()]
    return [(scene.name, scene.title, scene.description) for scene in scenes]


def _baud(text: str | None) -> int | None:
    if text is None:
        return None
    if not text.isdecimal() or not 0 < int(text) <= 20_000_000:
        raise UsageError(f"baud={text} is not a baud rate such as 115200")
    return int(text)
