"""Canned snapshots, built from closed forms and not by measuring."""

import math
from collections.abc import Callable

import numpy as np
import pytest

from acquisition.accounting import Tally
from acquisition.status import LinkState, ReaderStatus
from acquisition.stream import ChannelHint, StreamInfo
from dsp.reading import Reading
from dsp.verdict import Judgement, Verdict
from dsp.waveform import Channel, Kind
from dsp.window import Flag, Lock, Window
from shift.event import Event, Phase
from shift.snapshot import ChannelView, Snapshot, Stage, Trend


def _reading(rms: float, error: float, cut: bool, flags: Flag = Flag.NONE) -> Reading:
    orders = np.arange(1, 51)
    harmonics = np.where(orders % 2 == 1, rms * 0.9 / orders, 0.0).astype(complex)
    return Reading(
        start=10.0, duration=0.2, cycles=10, frequency=50.012, lock=Lock.LOCKED, rms=rms,
        mean=0.01, arv=0.8 * rms, peak_max=1.6 * rms, peak_min=-1.6 * rms, crest_factor=1.6,
        form_factor=1.25, fundamental=0.9 * rms, thd_f=0.4843, harmonics=harmonics,
        averaging=rms * (1.0 + error), averaging_error=error,
        firing_angle=math.pi / 3 if cut else math.nan,
        u={"rms": 0.03, "averaging": 0.03, "averaging_error": 0.004, "peak": 0.1,
           "mean": 0.02, "fundamental": 0.1},
        flags=flags,
    )  # fmt: skip


@pytest.fixture
def snapshot() -> Callable[..., Snapshot]:
    """A snapshot with `channels` channels; the first is misled, the others agree."""

    def _snapshot(channels: int = 2, names: tuple[str, ...] = (), **more: object) -> Snapshot:
        n = 2000
        phase = 2.0 * np.pi * np.arange(n) / 160.0 - 2.0 * np.pi * 20.0 / 160.0
        samples, views = [], []
        for k in range(channels):
            name = names[k] if k < len(names) else f"way {k + 1}"
            misled = k == 0
            rms = 133.5 if misled else 230.0 + k
            error = -0.362 if misled else 0.0001
            judgement = Judgement.MISLEADS if misled else Judgement.AGREES
            samples.append(math.sqrt(2.0) * rms * np.sin(phase))
            seconds = np.arange(300) * 0.2
            views.append(
                ChannelView(
                    Channel(name, "V", Kind.VOLTAGE),
                    _reading(rms, error, misled),
                    (Verdict("averaging", rms * (1 + error), error, 0.004, judgement),),
                    Trend(seconds, rms + np.where(seconds > 30.0, 0.1 * rms, 0.0)),
                    10 if misled else 0,
                    300,
                )
            )
        window = Window(
            samples=np.array(samples) if samples else np.empty((0, n)),
            first=1000, begin=1020.0, end=2620.0, rate=8000.0, cycles=10, frequency=50.012,
            u_frequency=1e-4, lock=Lock.LOCKED, flags=Flag.NONE,
        )  # fmt: skip
        info = StreamInfo("crestwire", tuple(ChannelHint(v.channel.name) for v in views), 8000.0)
        values: dict[str, object] = {
            "source": "/dev/ttyACM0",
            "stage": Stage.MEASURING,
            "words": "Measuring.",
            "stream": ReaderStatus(LinkState.LIVE, "/dev/ttyACM0", info, Tally(480000, 128)),
            "channels": tuple(views),
            "window": window,
            "events": (
                Event(
                    1, "misleads", Phase.BEGINS, "way 1", 4.2, None, -36.2, "%", "way 1: misleads"
                ),
            ),
            "seconds": 60.0,
            "windows": 300,
            "number": 1,
        }
        return Snapshot(**{**values, **more})  # type: ignore[arg-type]

    return _snapshot
