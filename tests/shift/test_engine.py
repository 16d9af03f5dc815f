"""The engine over Blocks: events begin and end, gaps are counted, the rate may be corrected."""

import math

import numpy as np
import pytest

from acquisition.accounting import Tally
from acquisition.block import Block
from acquisition.clock import ClockEstimate
from acquisition.status import LinkState, ReaderStatus
from acquisition.stream import ChannelHint, StreamInfo
from dsp.meters import BUILT_IN
from rig.setup import Setup, parse
from shift.engine import Engine
from shift.event import Phase
from shift.live import Live, WatchPlan
from shift.record import number, stream_record, window_record
from shift.snapshot import Stage
from shift.summary import Spread, Summary, with_run

RATE = 8000.0
INFO = StreamInfo(
    "crestwire",
    (ChannelHint("U", "V", gain=1.0), ChannelHint("I", "A", gain=1.0)),
    RATE,
    sample_type="f32",
)


def _wave(seconds, cut_from=math.inf, cut_to=math.inf, at=0.0):
    """A plain supply, and a current that is cut at 90 degrees between two times."""
    t = at + np.arange(int(seconds * RATE)) / RATE
    phase = 2.0 * np.pi * 50.0 * t
    plain = np.sin(phase)
    cut = np.where(np.mod(phase, np.pi) >= np.pi / 2.0, plain, 0.0)
    current = np.where((t >= cut_from) & (t < cut_to), cut, plain)
    return np.stack((325.0 * plain, 10.0 * current))


def _engine(info=INFO, setup=None):
    return Engine(setup or Setup.empty(), info, BUILT_IN)


def _events(batches):
    return [event for batch in batches for event in batch.events]


def test_a_meter_that_misleads_is_one_event_with_two_phases():
    engine = _engine()
    batches = engine.feed(Block(_wave(6.0, 2.0, 4.0), 0), RATE) + engine.finish()
    events = _events(batches)
    assert [(e.kind, e.phase, e.channel) for e in events] == [
        ("misleads", Phase.BEGINS, "I"), ("misleads", Phase.ENDS, "I"),
    ]  # fmt: skip
    begins, ends = events
    assert begins.number == ends.number
    # Two windows in a row of 0.2 s either way, and a window cut by the change may join.
    assert begins.start == pytest.approx(2.3, abs=0.31)
    assert ends.start + ends.duration == pytest.approx(4.3, abs=0.41)
    assert ends.value == pytest.approx(-29.3, abs=0.7)  # closed form: -29.29 % at 90 degrees
    assert "29" in ends.words
    assert "low" in ends.words


def test_an_event_still_open_at_the_end_is_closed():
    engine = _engine()
    events = _events(engine.feed(Block(_wave(3.0, 1.0), 0), RATE) + engine.finish())
    assert [e.phase for e in events] == [Phase.BEGINS, Phase.ENDS]


def test_gaps_close_together_are_one_event_and_every_set_counts():
    engine = _engine()
    batches, index = [], 0
    for lost in (0, 100, 50, 0, 7):
        index += lost
        batches += engine.feed(
            Block(_wave(1.0, at=index / RATE), index, lost_before=lost, gap_before=lost > 0), RATE
        )
        index += 8000
    batches += engine.finish()
    gaps = [e for e in _events(batches) if e.kind == "gap"]
    assert [e.phase for e in gaps] == [Phase.BEGINS, Phase.ENDS]
    assert gaps[-1].value == 157.0
    assert "3 places" in gaps[-1].words
    assert engine.lost_seconds == pytest.approx(157 / RATE)
    flagged = sum(
        "gap" in b.readings.cell(w, 0).flags.words()
        for b in batches
        for w in range(len(b.readings))
    )
    assert flagged == 3


def test_a_gap_that_cannot_be_counted_is_never_called_none():
    engine = _engine()
    batches = engine.feed(Block(_wave(1.0), 0), RATE)
    batches += engine.feed(Block(_wave(1.0), 8000, lost_before=None, gap_before=True), RATE)
    gaps = [e for e in _events(batches + engine.finish()) if e.kind == "gap"]
    assert [e.value for e in gaps] == [None, None]


def test_clipping_is_an_event():
    hint = ChannelHint("U", "V", gain=1.0, rails=(-300.0, 300.0), step=0.2)
    engine = _engine(StreamInfo("crestwire", (hint,), RATE, sample_type="f32"))
    t = np.arange(16000) / RATE
    wave = np.clip(np.where(t < 1.0, 1.0, 1.2) * 290.0 * np.sin(2 * np.pi * 50 * t), -300, 300)
    events = _events(engine.feed(Block(wave[None, :], 0), RATE) + engine.finish())
    assert [(e.kind, e.phase) for e in events if e.kind == "clipped"] == [
        ("clipped", Phase.BEGINS), ("clipped", Phase.ENDS),
    ]  # fmt: skip


@pytest.mark.parametrize("sets", [1, 13, 64, 1000, 16000])
def test_numbers_do_not_depend_on_how_the_stream_is_cut(sets):
    wave = _wave(1.3, 0.5)
    whole = _engine()
    cut = _engine()
    expected = [b for b in whole.feed(Block(wave, 0), RATE) + whole.finish() if len(b.readings)]
    got = []
    for at in range(0, wave.shape[1], sets):
        got += cut.feed(Block(wave[:, at : at + sets].copy(), at), RATE)
    got += cut.finish()
    for name in ("start", "rms", "averaging", "thd_f", "frequency"):
        a = np.concatenate([getattr(b.readings, name) for b in expected])
        b = np.concatenate([getattr(b.readings, name) for b in got if len(b.readings)])
        assert a == pytest.approx(b, rel=1e-9, nan_ok=True)


def test_a_corrected_rate_moves_frequency_and_not_the_past():
    engine = _engine()
    batches = engine.feed(Block(_wave(2.0), 0), RATE)
    # The rate was 100 ppm off: from here on time runs a little slower, and does not jump.
    batches += engine.feed(Block(_wave(2.0, at=2.0), 16000), RATE * 1.0001)
    starts = np.concatenate([b.readings.start for b in batches if len(b.readings)])
    assert np.all(np.diff(starts) > 0.19)
    assert np.max(np.abs(np.diff(starts) - 0.2)) < 1e-4
    last = batches[-1].readings.frequency[-1]
    assert last == pytest.approx(50.0 * 1.0001, abs=1e-4)


def test_power_and_energy_of_a_pair():
    engine = _engine()
    batches = [b for b in engine.feed(Block(_wave(5.0), 0), RATE) if len(b.readings)]
    last = batches[-1].pairs(len(batches[-1].readings) - 1)[0]
    # Closed form: 325 V and 10 A peak in phase give 1625 W.
    assert last.p == pytest.approx(1625.0, rel=1e-6)
    assert last.pf == pytest.approx(1.0, abs=1e-9)
    covered = sum(float(b.readings.duration.sum()) for b in batches)
    assert last.energy == pytest.approx(1625.0 * covered / 3600.0, rel=1e-6)


def test_the_setups_limit_is_the_verdicts():
    strict = _engine(setup=parse("limit_pct = 40\n", "p"))
    batches = strict.feed(Block(_wave(2.0, 0.0), 0), RATE)
    assert batches[-1].verdicts(0, 1)[0].judgement.value != "misleads"


class _Source:
    """Hands out prepared Blocks, as a reader would."""

    def __init__(self, blocks, info, clock=None):
        self._blocks = list(blocks)
        self.status = ReaderStatus(LinkState.LIVE, "wire", info, Tally(), clock, 100)

    def take(self, timeout):
        if not self._blocks:
            self.status = ReaderStatus(
                LinkState.FINISHED,
                "wire",
                self.status.info,
                Tally(16000, 0),
                self.status.clock,
                100,
            )
            return []
        return [self._blocks.pop(0)]


def test_a_live_watch_publishes_snapshots():
    wave = _wave(2.0, 0.0)
    source = _Source([Block(wave[:, k : k + 800].copy(), k) for k in range(0, 16000, 800)], INFO)
    live = Live(source, WatchPlan("x", Setup.empty(), BUILT_IN), gather=0.0)
    assert live.snapshot.stage is Stage.STARTING
    numbers = []
    for _ in live.batches():
        numbers.append(live.snapshot.number)
    snapshot = live.snapshot
    assert snapshot.stage is Stage.FINISHED
    assert snapshot.number > numbers[0]
    assert [c.channel.name for c in snapshot.channels] == ["U", "I"]
    assert snapshot.channels[1].misleading_windows > 3
    assert len(snapshot.channels[0].trend.values) == snapshot.windows
    assert snapshot.window is not None
    assert snapshot.events[0].kind == "misleads"


def test_a_stream_without_rate_waits_for_the_clock():
    info = StreamInfo("text", (ChannelHint("ch1", gain=1.0),), None, sample_type="text")
    blocks = [Block(_wave(0.5)[:1], k * 4000) for k in range(4)]
    waiting = Live(_Source(blocks, info, None), WatchPlan("x", Setup.empty(), BUILT_IN), gather=0.0)
    assert list(waiting.batches()) == []
    assert waiting.engine is None
    clock = ClockEstimate(8000.2, 1e-4, 3.0, "arrival")
    known = Live(_Source(blocks, info, clock), WatchPlan("x", Setup.empty(), BUILT_IN), gather=0.0)
    assert any(len(b.readings) for b in known.batches())
    assert known.rate == 8000.2
    given = Live(
        _Source(blocks, info, clock),
        WatchPlan("x", Setup.empty(), BUILT_IN, rate=8000.0),
        gather=0.0,
    )
    assert list(given.batches())
    assert given.rate == 8000.0


def test_arrivals_of_a_faster_logger_are_scaled():
    hasty = ClockEstimate(80_004.0, 1e-5, 30.0, "arrival", ppm=9e6)
    plan = WatchPlan("x", Setup.empty(), BUILT_IN, speed=10.0)
    live = Live(_Source([Block(_wave(2.0), 0)], INFO, hasty), plan, gather=0.0)
    assert list(live.batches())
    assert live.rate == pytest.approx(8000.4)


def test_an_aggregate_of_values_is_their_root_mean_square():
    """Half at 230, half at 207 V: 218.8024 V (closed form); their plain mean, 218.5, is another."""
    spread = Spread().with_values(np.full(10, 230.0)).with_values(np.full(10, 207.0))
    assert spread.root_mean_square == pytest.approx(218.8024, abs=5e-5)
    assert spread.mean == pytest.approx(218.5)
    assert (spread.low, spread.high, spread.count) == (207.0, 230.0, 20)
    assert math.isnan(Spread().mean)
    assert Spread().with_values(np.array([np.nan])).count == 0


def test_summaries_add_up_over_runs():
    engine = _engine()
    summary = Summary(engine.channels[1])
    batches = engine.feed(Block(_wave(4.0, 2.0), 0), RATE) + engine.finish()
    for batch in batches:
        if len(batch.readings):
            summary = with_run(summary, batch.readings, batch.shown[0].codes, 1, 0.0)
    assert summary.windows == 19
    assert 7 <= summary.windows_misleading <= 9
    assert summary.seconds_covered == pytest.approx(3.8, abs=1e-3)


def test_records_hold_no_figure_that_does_not_exist():
    assert number(math.nan) is None
    assert number(math.inf) is None
    assert number(None) is None
    assert number(1.23456789012345) == 1.23456789
    engine = _engine()
    dead = engine.feed(Block(np.zeros((2, 8000)), 0), RATE) + engine.finish()
    batch = next(b for b in dead if len(b.readings))
    record = window_record(batch.channels[0], batch.readings.cell(0, 0), batch.verdicts(0, 0))
    assert record["rms"] == 0.0
    assert record["crest_factor"] is None
    assert record["verdict"] == "unsure"
    assert record["flags"] == ["low-signal", "unlocked"]
    record = stream_record(ReaderStatus(tally=Tally(10, None)), 1.0)
    assert record["lost_samples"] is None


def test_a_source_that_goes_and_comes_back_is_one_event():
    wave = _wave(2.0)

    class Broken(_Source):
        """Gone for a few looks in the middle."""

        looks = 0

        def take(self, timeout):
            self.looks += 1
            gone = 6 <= self.looks < 9
            self.status = ReaderStatus(
                LinkState.GONE if gone else LinkState.LIVE, "wire", INFO, Tally(), None, 100
            )
            return [] if gone else super().take(timeout)

    blocks = [Block(wave[:, k : k + 1600].copy(), k) for k in range(0, 16000, 1600)]
    live = Live(Broken(blocks, INFO), WatchPlan("x", Setup.empty(), BUILT_IN), gather=0.0)
    events = [e for e in _events(live.batches()) if e.kind == "stream"]
    assert [e.phase for e in events] == [Phase.BEGINS, Phase.ENDS]
    assert "looking for it" in events[0].words
    assert "back after" in events[1].words
    assert 0.9 < events[0].start < 1.3
