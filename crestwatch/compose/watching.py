"""A live watch, opened: its source, its engine, and the screen for it."""

import sys
from collections.abc import Mapping
from dataclasses import replace

from acquisition.autodecode import AutoDecoder
from acquisition.reader import Reader
from acquisition.recordings.replay import Replay
from acquisition.status import LinkState, ReaderStatus
from acquisition.stream import clean
from crestwatch import diagnostics
from crestwatch.compose.sources import opener, recording
from crestwatch.output import Described
from crestwatch.source import FileSource, SimSource, Source
from dsp.meters import BUILT_IN
from rig.setup import Setup
from shift.live import Live, WatchPlan


class Watch:
    """An opened live watch; whoever opens it closes it."""

    def __init__(self, source: "Reader | Replay", plan: WatchPlan) -> None:
        self._source = source
        self._speed = plan.speed
        self.live = Live(source, plan)

    def close(self) -> None:
        """End the watch and let go of its source."""
        self.live.stop()
        self._source.stop()

    def status(self) -> ReaderStatus:
        """The reader's latest state; a clock that is run faster on purpose is none of it."""
        status = self._source.status
        if self._speed != 1.0 and isinstance(self._source, Reader):
            return replace(status, clock=None)
        return status

    def described(self, source: str) -> Described:
        """What is being watched, for an output; the engine stands once a Batch has come."""
        engine, info = self.live.engine, self.live.info
        assert engine is not None
        assert info is not None
        return Described(source, info, self.live.rate or 0.0, engine.channels, engine.nominal)

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


def plan_for(text: str, setup: Setup, rate: float | None = None, setup_name: str = "") -> WatchPlan:
    """What is watched and how, with every card in force."""
    return WatchPlan(clean(text, 60), setup, BUILT_IN, rate, clean(setup_name))


def open_watch(
    source: Source,
    text: str,
    setup: Setup,
    *,
    setup_name: str = "",
    rate: float | None = None,
    scale: Mapping[str, tuple[float, str]] | None = None,
    format_: str | None = None,
    speed: float = 1.0,
    baud: int | None = None,
) -> Watch:
    """Open a source for watching.

    Raises:
        UsageError: an option does not fit the source.
        LinkError, RecordingError: it cannot be opened.
    """
    plan = plan_for(text, setup, rate, setup_name)
    if isinstance(source, FileSource):
        opened = recording(source.path, rate or setup.rate_hz, scale, format_)
        return Watch(Replay(opened, speed), plan)
    decoder = AutoDecoder(format_ or setup.format, rate=rate)
    plan = replace(plan, speed=speed)
    reader = Reader(
        opener(source, setup, speed, baud), decoder, reconnect=not isinstance(source, SimSource)
    )
    reader.start()
    return Watch(reader, plan)


def show_screen(watch: Watch, theme: str | None, glyphs: str, length: float | None) -> None:
    """Run the live screen until the person leaves or `length` s have passed."""
    from shift.wording import CAUTION_TITLE, CAUTIONS
    from tui.app import CrestwatchApp
    from tui.settings import Settings

    live = watch.live
    live.start()
    settings = Settings.chosen(theme=theme, glyphs=glyphs)
    app = CrestwatchApp(
        lambda: live.snapshot,
        settings=settings,
        cautions=(CAUTION_TITLE, *CAUTIONS),
        leave_after=length,
    )
    if not sys.stderr.isatty():
        # The screen is written to where errors go; those may have been sent to a file.
        sys.__stderr__ = sys.__stdout__  # type: ignore[misc]
    app.run()
    live.stop()
