"""Dips, swells and interruptions at a zero crossing, 50 Hz: half-cycle RMS worked by hand.

A dip to a share d of the voltage for whole cycles passes through sqrt((1 + d^2)/2) on its way in
and out, a half cycle each (closed form), and its times are those of the cycles' ends.
"""

import numpy as np
import pytest

from acquisition.block import Block
from acquisition.stream import ChannelHint, StreamInfo
from dsp.meters import BUILT_IN
from rig.setup import Setup, parse
from shift.engine import Engine
from shift.event import Phase

RATE = 8000.0
INFO = StreamInfo("crestwire", (ChannelHint("mains", "V", gain=1.0),), RATE, sample_type="f32")


def _events(share, cycles, at=2.0, seconds=5.0, sets=16000, setup=None):
    """What is told of a supply of 230 V that stands at `share` of it for so many cycles."""
    t = np.arange(int(seconds * RATE)) / RATE
    inside = (t >= at - 1e-9) & (t < at + cycles / 50.0 - 1e-9)
    wave = 230.0 * np.sqrt(2.0) * np.where(inside, share, 1.0) * np.sin(2.0 * np.pi * 50.0 * t)
    engine = Engine(setup or Setup.empty(), INFO, BUILT_IN)
    batches = []
    for k in range(0, len(wave), sets):
        batches += engine.feed(Block(wave[None, k : k + sets].copy(), k), RATE)
    batches += engine.finish()
    return [e for b in batches for e in b.events if e.kind in ("dip", "swell", "interruption")]


# share, cycles: kind, residual as a share, duration; closed form as above
CASES = [
    (0.5, 5, "dip", 0.5, 0.110),
    (0.5, 1, "dip", 0.5, 0.030),
    (0.0, 0.5, "dip", 0.70711, 0.020),
    (0.85, 5, "dip", 0.85, 0.090),
    (0.02, 20, "interruption", 0.02, 0.410),
    (1.2, 10, "swell", 1.2, 0.200),
]


@pytest.mark.parametrize("sets", [64, 16000])
@pytest.mark.parametrize(("share", "cycles", "kind", "residual", "seconds"), CASES)
def test_what_a_supply_does(share, cycles, kind, residual, seconds, sets):
    begins, ends = _events(share, cycles, sets=sets)
    assert (begins.phase, ends.phase) == (Phase.BEGINS, Phase.ENDS)
    assert begins.number == ends.number
    assert ends.kind == kind
    assert ends.value == pytest.approx(residual * 230.0, rel=0.002)
    assert ends.duration == pytest.approx(seconds, abs=0.0101)  # half a cycle
    assert begins.start == pytest.approx(2.01, abs=0.0101)
    assert f"({100 * residual:.1f} %)" in ends.words


@pytest.mark.parametrize(("share", "cycles"), [(0.93, 10), (1.07, 10), (1.0, 1)])
def test_within_the_band_nothing_is_told(share, cycles):
    assert _events(share, cycles) == []


def test_a_declared_voltage_is_the_reference():
    setup = parse("declared_v = 260\n", "p")
    told = _events(1.0, 1, setup=setup)  # 230 of 260 V: below 90 % from the start
    assert [e.phase for e in told] == [Phase.BEGINS, Phase.ENDS]  # closed by the stream's end
    assert told[0].kind == "dip"


def test_an_interruption_longer_than_the_lock_holds_is_told_with_its_length():
    begins, ends = _events(0.0, 150, seconds=8.0)  # three seconds
    assert ends.kind == "interruption"
    # Without cycles the voltage's return is seen by windows of 0.2 s.
    assert ends.duration == pytest.approx(3.0, abs=0.41)
    assert begins.start == pytest.approx(2.01, abs=0.011)


def test_the_workshops_compressor_dips_the_supply():
    from sim.scenes import find

    scene = find("workshop")
    t = np.arange(int(16 * RATE)) / RATE
    hints = tuple(ChannelHint(c.name, c.unit, gain=1.0) for c in scene.channels)
    info = StreamInfo("crestwire", hints, RATE, sample_type="f32")
    engine = Engine(Setup.empty(), info, BUILT_IN)
    batches = engine.feed(Block(scene.at(t), 0), RATE) + engine.finish()
    ends = [e for b in batches for e in b.events if e.kind == "dip" and e.phase is Phase.ENDS]
    assert len(ends) == 1
    assert ends[0].channel == "bench supply"
    # The scene's own truth: 17 % less while the motor starts, 0.42 s.
    assert ends[0].value == pytest.approx(0.83 * 231.0, rel=0.002)
    assert ends[0].duration == pytest.approx(scene.start_lasts, abs=0.02)


def test_a_scrap_between_two_gaps_is_no_dip():
    t = np.arange(40000) / RATE
    wave = 230.0 * np.sqrt(2.0) * np.sin(2.0 * np.pi * 50.0 * t)
    engine = Engine(Setup.empty(), INFO, BUILT_IN)
    batches = []
    for a, b in ((0, 16000), (16050, 16114), (16200, 40000)):  # 64 sets are 0.4 of a cycle
        gap = 50 if a else 0
        block = Block(wave[None, a:b].copy(), a, lost_before=gap, gap_before=a > 0)
        batches += engine.feed(block, RATE)
    batches += engine.finish()
    assert [e.kind for b in batches for e in b.events] == ["gap", "gap"]
