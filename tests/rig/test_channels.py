"""Channels and scaling: the setup's word, then the source's, then counts."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

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


def _one(setup_text: str, hint: ChannelHint, sample_type: str = "u16"):
    (channel,) = channels.describe(parse(setup_text, "p"), _info(hint, sample_type=sample_type))
    return channel


def test_numbers_without_a_unit_take_the_setups_prefix_and_all():
    hint = ChannelHint("U", "", gain=1.0)
    info = _info(hint, sample_type="float64")
    setup = parse('[[channel]]\nunit = "kV"\n', "p")
    (wave,) = Scaler(setup, info).waveforms(Block(np.array([[0.4]]), 0), 1.0)
    assert wave.samples[0, 0] == pytest.approx(400.0)
    assert channels.describe(setup, info)[0].unit == "V"


def test_a_unit_alone_does_not_turn_volts_into_amperes():
    with pytest.raises(SetupError, match=r"line 1: U comes in V") as caught:
        _one('[[channel]]\nunit = "A"\n', TOLD)
    assert "add gain" in caught.value.__notes__[0]
    assert _one('[[channel]]\nunit = "A"\ngain = 30\n', TOLD).kind is Kind.CURRENT


def test_a_clamp_the_wrong_way_round_is_turned_on_the_sources_own_scale():
    setup = parse("[[channel]]\ninvert = true\n", "p")
    block = Block(np.array([[2058]], np.uint16), 0)
    (wave,) = Scaler(setup, _info(TOLD)).waveforms(block, 8000.0)
    assert wave.samples[0, 0] == pytest.approx(-2.0)
    (turned,) = channels.describe(setup, _info(TOLD))
    assert (turned.low, turned.high) == (pytest.approx(-409.4), pytest.approx(409.6))
    (wave,) = Scaler(setup, _info(UNTOLD)).waveforms(block, 8000.0)
    assert wave.samples[0, 0] == -2058.0  # counts


def test_the_uncertainty_of_the_zero_is_in_the_unit_as_written():
    text = '[[channel]]\nunit = "kV"\ngain = 0.001\nu_offset = 0.002\n'
    assert _one(text, TOLD).u_offset == pytest.approx(2.0)


# (setup, the stream's words): the rails, in codes
RAILS = {
    "unsigned words": ("offset_codes = -2048", "u16", (0, 4095)),
    "signed words": ("", "i16", (-2048, 2047)),
    "printed codes about mid code": ("offset_codes = -2048", "text", (0, 4095)),
    "printed codes about 0, signed or not": ("", "text", (-2048, 4095)),
    "as told": ("code_min = 10\ncode_max = 4000", "u16", (10, 4000)),
}


@pytest.mark.parametrize("sentence", RAILS)
def test_rails_follow_the_converter_and_the_words(sentence):
    said, sample_type, (low, high) = RAILS[sentence]
    text = f"[[channel]]\nadc_bits = 12\nvolts_per_code = 0.001\ndivider = 1000\n{said}\n"
    channel = _one(text, ChannelHint("x", step=1.0), sample_type)
    offset = 2048 if "-2048" in said else 0  # 1 V a code
    assert (channel.low + offset, channel.high + offset) == (low, high)


def test_a_scale_for_values_that_are_no_codes_gives_them_no_step():
    values = ChannelHint("x", gain=1.0)  # a table with decimals
    assert _one('[[channel]]\nunit = "V"\ngain = 231.4\n', values, "float64").step == 0.0
    coded = "[[channel]]\nadc_bits = 12\nadc_reference_v = 4.096\ndivider = 100\n"
    assert _one(coded, values, "float64").step == pytest.approx(0.1)
    assert _one('[[channel]]\nunit = "V"\ngain = 0.5\n', UNTOLD_CODES).step == 0.5


UNTOLD_CODES = ChannelHint("ch1", step=1.0)


def test_every_channel_has_a_name_of_its_own():
    info = _info(UNTOLD, UNTOLD, ChannelHint("ch1"))
    assert len({c.name for c in channels.describe(Setup.empty(), info)}) == 3
    with pytest.raises(SetupError, match="also the logger's own name"):
        channels.describe(parse('[[channel]]\ninput = 1\nname = "ch1"\n', "p"), info)
    swapped = '[[channel]]\ninput = 1\nname = "b"\n[[channel]]\ninput = 2\nname = "a"\n'
    info = _info(ChannelHint("a"), ChannelHint("b"))
    assert [c.name for c in channels.describe(parse(swapped, "p"), info)] == ["b", "a"]


def test_one_voltage_and_several_currents_are_not_paired_by_guess():
    hints = [
        ChannelHint(n, u, gain=1.0)
        for n, u in (("L1 voltage", "V"), ("way 1", "A"), ("l1 current", "A"))
    ]
    described = channels.describe(Setup.empty(), _info(*hints))
    assert channels.pairs(Setup.empty(), described) == ((0, 2),)
    described = channels.describe(Setup.empty(), _info(*hints[:2]))
    assert channels.pairs(Setup.empty(), described) == ((0, 1),)


def test_a_pair_or_reference_that_cannot_be_is_told_with_its_line():
    hints = [ChannelHint("V1", "V", gain=1.0), ChannelHint("I1", "A", gain=1.0)]
    described = channels.describe(Setup.empty(), _info(*hints))
    swapped = parse('site = "x"\n[[pair]]\nvoltage = "I1"\ncurrent = "V1"\n', "p")
    with pytest.raises(SetupError, match=r"line 2.*I1 for its voltage") as caught:
        channels.pairs(swapped, described)
    assert "swap" in caught.value.__notes__[0]
    with pytest.raises(SetupError, match=r"line 2.*nowhere"):
        channels.reference(parse('site = "x"\nreference = "nowhere"\n', "p"), described)


def test_counts_are_told_and_what_would_change_them():
    described = channels.describe(Setup.empty(), _info(TOLD, UNTOLD))
    (sentence,) = channels.advice(Setup.empty(), described)
    assert sentence.startswith("ch2 is in counts: a setup")
    named = parse('[[channel]]\ninput = 2\nname = "way 1"\nunit = "A"\n', "panel.toml")
    (sentence,) = channels.advice(named, channels.describe(named, _info(TOLD, UNTOLD)))
    assert sentence.startswith("way 1 is in counts: panel.toml does not say")
    assert channels.advice(Setup.empty(), channels.describe(Setup.empty(), _info(TOLD))) == ()


def test_what_was_lost_before_a_block_of_no_numbers_is_not_forgotten():
    nan = float("nan")
    info = _info(ChannelHint("x", gain=1.0), sample_type="float64")
    scaler = Scaler(Setup.empty(), info)
    first = scaler.waveforms(Block(np.array([[nan, nan]]), 5, lost_before=5, gap_before=True), 1.0)
    second = scaler.waveforms(Block(np.array([[1.0]]), 10, lost_before=3, gap_before=True), 1.0)
    third = scaler.waveforms(Block(np.array([[2.0]]), 11), 1.0)
    assert first == []
    assert [(w.start, w.lost_before, w.gap_before) for w in second + third] == [
        (10, 10, True), (11, 0, False),
    ]  # fmt: skip
    scaler = Scaler(Setup.empty(), info)
    scaler.waveforms(Block(np.array([[nan]]), 5, lost_before=None, gap_before=True), 1.0)
    (wave,) = scaler.waveforms(Block(np.array([[1.0, 2.0]]), 6), 1.0)
    assert (wave.lost_before, wave.gap_before) == (None, True)


@settings(deadline=None, max_examples=100)
@given(
    st.lists(
        st.tuples(st.integers(0, 3), st.lists(st.booleans(), min_size=1, max_size=6)), max_size=8
    )
)
def test_every_set_is_handed_on_or_told_lost(blocks):
    scaler = Scaler(Setup.empty(), _info(ChannelHint("x", gain=1.0), sample_type="float64"))
    at, end, waves = 0, 0, []
    for lost, good in blocks:
        at += lost
        codes = np.where(good, np.arange(at, at + len(good), dtype=float), np.nan)[None, :]
        waves += scaler.waveforms(Block(codes, at, lost_before=lost, gap_before=lost > 0), 1.0)
        at += len(good)
    for wave in waves:
        assert wave.start == end + wave.lost_before
        assert wave.gap_before == (wave.lost_before > 0)
        assert wave.samples[0].tolist() == list(range(wave.start, wave.stop))
        end = wave.stop


def test_the_zero_of_a_converter_of_known_bits_is_looked_for_in_its_own_range():
    # 12 bits biased to a tenth of the range: codes below 1024, which alone would look like 10 bits.
    codes = np.rint(560 + 300 * np.sin(np.arange(1000) / 9.0))[None, :]
    info = _info(UNTOLD_CODES, format_="text", sample_type="text")
    assert with_zero(Setup.empty(), info, codes).channels[0].offset_codes == -512.0
    told = parse("[[channel]]\nadc_bits = 12\nadc_reference_v = 3.3\ndivider = 200\n", "p")
    assert "not known" in with_zero(told, info, codes).notes[-1]


def test_the_lines_that_identify_proposes_for_raw_words_are_whole():
    hints = (ChannelHint("ch1", step=1.0), ChannelHint("ch2", step=1.0))
    info = StreamInfo("raw", hints, None, sample_type="i16", byte_order="big")
    assert parse(setup_lines(info, 4000.1), "proposed").format == "raw:i16:2:big"
