"""Channels and scaling: the setup's word, then the source's, then counts."""

import numpy as np
import pytest

from acquisition.block import Block
from acquisition.stream import ChannelHint, StreamInfo
from dsp.waveform import Kind
from rig import channels
from rig.errors import SetupError
from rig.proposal import setup_lines
from rig.scaling import Scaler
from rig.setup import Setup, parse
from rig.zero import needs_zero, with_zero


def _info(*hints: ChannelHint, format_: str = "crestwire", sample_type: str = "u16") -> StreamInfo:
    return StreamInfo(format_, hints, 8000.0, sample_type=sample_type)


TOLD = ChannelHint("U", "V", gain=0.2, offset_codes=-2048.0, rails=(0, 4095), step=1.0)
UNTOLD = ChannelHint("ch2")


def test_the_source_is_believed_where_the_setup_is_silent():
    told, untold = channels.describe(Setup.empty(), _info(TOLD, UNTOLD))
    assert (told.name, told.unit, told.kind) == ("U", "V", Kind.VOLTAGE)
    assert told.step == pytest.approx(0.2)
    assert (told.low, told.high) == (pytest.approx(-409.6), pytest.approx(409.4))
    assert (untold.unit, untold.kind) == ("counts", Kind.OTHER)


def test_the_setup_has_the_first_word():
    setup = parse(
        '[[channel]]\ninput = "U"\nname = "mains"\nunit = "kV"\ngain = 0.001\noffset_codes = -100\n',
        "p",
    )
    (mains,) = channels.describe(setup, _info(TOLD))
    assert (mains.name, mains.unit) == ("mains", "V")
    block = Block(np.array([[100, 101, 99]], np.uint16), 0)
    (wave,) = Scaler(setup, _info(TOLD)).waveforms(block, 8000.0)
    assert wave.samples[0] == pytest.approx([0.0, 1.0, -1.0])  # 0.001 kV a code


def test_value_is_gain_times_code_plus_offset():
    block = Block(np.array([[2048, 2049, 0]], np.uint16), 7, lost_before=3, gap_before=True)
    (wave,) = Scaler(Setup.empty(), _info(TOLD)).waveforms(block, 8000.0)
    assert wave.samples[0] == pytest.approx([0.0, 0.2, -409.6])
    assert (wave.start, wave.lost_before, wave.gap_before) == (7, 3, True)
    assert not wave.samples.flags.writeable


def test_units_with_prefix_come_out_without():
    assert channels.si_unit("kV") == ("V", 1e3)
    assert channels.si_unit("mA") == ("A", 1e-3)
    assert channels.si_unit("degC") == ("degC", 1.0)
    hint = ChannelHint("U", "kV", gain=1.0)
    block = Block(np.array([[0.4]]), 0)
    (wave,) = Scaler(Setup.empty(), _info(hint, sample_type="float64")).waveforms(block, 1.0)
    assert wave.samples[0, 0] == pytest.approx(400.0)


def test_a_channel_that_is_not_there_is_named_with_those_that_are():
    setup = parse("[[channel]]\ninput = 3\n", "panel.toml")
    with pytest.raises(SetupError, match=r"line 1.*input 3") as caught:
        channels.describe(setup, _info(TOLD, UNTOLD))
    assert "1 (U)" in caught.value.__notes__[0]
    with pytest.raises(SetupError, match="described twice"):
        channels.describe(parse("[[channel]]\ninput=1\n[[channel]]\ninput=1\n", "p"), _info(TOLD))


def test_pairs_and_reference():
    hints = [
        ChannelHint(n, u, gain=1.0)
        for n, u in (("VA", "V"), ("VB", "V"), ("IA", "A"), ("IB", "A"), ("T", "degC"))
    ]
    described = channels.describe(Setup.empty(), _info(*hints))
    assert channels.pairs(Setup.empty(), described) == ((0, 2), (1, 3))
    assert channels.reference(Setup.empty(), described) == 0
    named = parse('reference = "VB"\n[[pair]]\nvoltage = "VA"\ncurrent = "IB"\n', "p")
    assert channels.pairs(named, described) == ((0, 3),)
    assert channels.reference(named, described) == 1
    with pytest.raises(SetupError, match="VC"):
        channels.reference(parse('reference = "VC"\n', "p"), described)


def test_sets_that_are_no_numbers_part_the_waveform_and_are_counted():
    nan = float("nan")
    info = _info(ChannelHint("x", gain=1.0), sample_type="float64")
    scaler = Scaler(Setup.empty(), info)
    waves = scaler.waveforms(Block(np.array([[1.0, nan, nan, 2.0, 3.0, nan]]), 10), 100.0)
    waves += scaler.waveforms(Block(np.array([[4.0, 5.0]]), 16), 100.0)
    assert [(w.start, w.samples.shape[1], w.lost_before, w.gap_before) for w in waves] == [
        (10, 1, 0, False), (13, 2, 2, True), (16, 2, 1, True),
    ]  # fmt: skip


def test_the_zero_of_an_unknown_converter_is_mid_code_and_said():
    info = _info(ChannelHint("ch1", step=1.0), format_="text", sample_type="text")
    codes = np.rint(512 + 300 * np.sin(np.arange(1000) / 9.0))[None, :]
    assert needs_zero(Setup.empty(), info)
    found = with_zero(Setup.empty(), info, codes)
    assert found.channels[0].offset_codes == -512.0
    assert found.channels[0].rails == (0.0, 1023.0)
    assert found.channels[0].u_offset_codes > 0.0
    assert "mid code" in found.notes[-1]
    assert not needs_zero(parse("[[channel]]\noffset_codes = -500\n", "p"), info)


def test_a_zero_that_nothing_suggests_lets_no_verdict_stand():
    info = _info(ChannelHint("ch1", step=1.0), format_="text", sample_type="text")
    codes = np.rint(90 + 40 * np.sin(np.arange(1000) / 9.0))[None, :] + 0.5
    found = with_zero(Setup.empty(), info, codes)
    assert found.channels[0].offset_codes == 0.0
    assert found.channels[0].u_offset_codes == pytest.approx(90.5, abs=1.0)
    assert "not known" in found.notes[-1]


def test_what_identify_proposes_loads_as_a_setup():
    setup = parse(setup_lines(_info(TOLD, UNTOLD), None), "proposed")
    assert [c.name for c in setup.channels] == ["U", "ch2"]
    assert setup.format == "crestwire"
