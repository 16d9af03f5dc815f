"""A setup: read as written, refused with its line and the fix."""

from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dsp.waveform import Kind
from rig.errors import SetupError
from rig.setup import Setup, parse
from rig.setup_file import load

GOOD = """\
site = "Riverside"
nominal_hz = 60
limit_pct = 3
reference = "mains"

[logger]
format = "text"
baud = 230400
rate_hz = 4000

[[channel]]
input = 2
name = "mains"
unit = "kV"
gain = 0.0002
offset_codes = -512
u_gain_pct = 0.6
delay_us = 12.5

[[channel]]
input = "aux"
name = "load"
adc_bits = 12
adc_reference_v = 4.096
clamp_a_per_v = 30
invert = true

[[pair]]
voltage = "mains"
current = "load"
"""


def test_a_setup_is_read_as_written():
    setup = parse(GOOD, "panel.toml")
    assert (setup.site, setup.nominal_hz, setup.limit, setup.reference) == (
        "Riverside", 60.0, 0.03, "mains",
    )  # fmt: skip
    assert (setup.format, setup.baud, setup.rate_hz) == ("text", 230400, 4000.0)
    mains, load_ = setup.channels
    assert (mains.input, mains.gain, mains.offset_codes) == (2, 0.0002, -512.0)
    assert mains.u_gain == pytest.approx(0.006)
    assert mains.delay == pytest.approx(12.5e-6)
    # 4.096 V over 2^12 codes is 1 mV a code; 30 A per V: 0.03 A a code, the other way round.
    assert load_.gain == pytest.approx(-0.03)
    assert load_.unit == "A"
    assert (load_.adc_bits, load_.coded) == (12, True)
    assert setup.pairs == (("mains", "load"),)


def test_nothing_is_required():
    assert parse("", "x") == Setup(where="x")


# what is wrong: (text, line, words of the message, words of the advice)
WRONG = {
    "no TOML": ("site = \n", 1, "TOML", "docs/setup.md"),
    "cut text": ('site = "x', 1, "TOML", "close the quotes"),
    "a decimal comma": ("limit_pct = 2,5\n", 1, "column 14", "limit_pct = 2.5"),
    "a percent sign": ("\nlimit_pct = 2 %  # tight\n", 2, "TOML", "alone: limit_pct = 2"),
    "no quotes": ("site = Hall 2 # north\n", 1, "TOML", 'site = "Hall 2"'),
    "a key that stands twice": ("limit_pct = 2\nlimit_pct = 3\n", 2, "TOML", "remove one"),
    "a table that stands twice": ("[logger]\nbaud = 9600\n[logger]\n", 3, "TOML", "once in the file"),
    "two tables with one bracket": ('[channel]\nname = "a"\n[channel]\n', 3, "TOML", "[[channel]]"),
    "no equals sign": ("limit_pct 2\n", 1, "TOML", "equals sign"),
    "a key with a slip": ("\n\nnominal = 50\n", 3, "nominal", "nominal_hz"),
    "a slip in a channel": ('[[channel]]\nname = "a"\ngian = 2\n', 3, "gian", "gain"),
    "text for a number": ('limit_pct = "two"\n', 1, "not a number", "limit_pct = 1"),
    "a number for text": ("site = 4\n", 1, "not text", "quotes"),
    "out of range": ("nominal_hz = 400\n", 1, "out of range", "40 to 70"),
    "not finite": ("limit_pct = nan\n", 1, "out of range", "0.01"),
    "one rail": ("[[channel]]\ncode_min = 0\n", 2, "go together", "code_max"),
    "a divider of nothing": ("[[channel]]\ndivider = 200\n", 2, "what a code is worth", "adc_bits"),
    "two scales": ("[[channel]]\ngain = 1\ndivider = 200\nvolts_per_code = 1\n", 2, "already", "remove"),
    "divider and clamp": ("[[channel]]\nvolts_per_code = 1\ndivider = 1\nclamp_a_per_v = 1\n", 4, "not both", "remove"),
    "no scale": ("[[channel]]\ngain = 0\n", 2, "scale is 0", "not 0"),
    "twins": ('[[channel]]\nname = "a"\n[[channel]]\nname = "a"\n', 4, "two channels", "own name"),
    "a lone pair": ('[[pair]]\nvoltage = "a"\n', 1, "voltage and a current", "current"),
    "one bracket": ('[channel]\nname = "a"\n', 1, "list of tables", "[[channel]]"),
    "an unknown kind": ('[[channel]]\nkind = "heat"\n', 2, "kind", "voltage"),
    "an unknown format": ('[logger]\nformat = "morse"\n', 2, "morse", "crestwire"),
    "an input that is none": ("[[channel]]\ninput = 0\n", 2, "input", "first channel"),
    "text for true": ('[[channel]]\ninvert = "yes"\n', 2, "true nor false", "invert = true"),
    "half a bit": ("[[channel]]\nadc_bits = 12.5\n", 2, "not whole", "6 to 32"),
    "a number beyond floats": (f"nominal_hz = {'9' * 400}\n", 1, "out of range", "40 to 70"),
    "a number beyond digits": (f"\nnominal_hz = 0x{'f' * 9000}\n", 2, "out of range", "40 to 70"),
    "a number in quotes": ('nominal_hz = "60"\n', 1, "not a number", "nominal_hz = 60"),
    "half a key": ("[[channel]]\nclamp = 30\n", 2, "clamp", "clamp_a_per_v"),
    "a key of another table": ("[logger]\nrate_hz = 4000\nrate = 4000\n", 3, "rate", "rate_hz"),
    "in the second channel": ("[[channel]]\nu_gain_pct = 1\n[[channel]]\nu_gain_pct = 200\n", 4, "200", "100"),
    "a heading with spaces": ("[[ channel ]]\ngain = 1\n[[channel]]\ngian = 1\n", 4, "gian", "gain"),
    "a heading in a text": ("site = '''\n[[channel]]\n'''\n[[channel]]\ngian = 1\n", 5, "gian", "gain"),
    "channels in a list": ("channel = [\n  {gain = 1},\n  {gian = 1}]\n", 3, "gian", "gain"),
    "a dotted key": ("logger.buad = 9600\n", 1, "buad", "baud"),
    "a word first in a comment": ('# limit_pct: tight\nlimit_pct = "two"\n', 2, "not a number", "limit_pct"),
    "a unit spelled out": ('[[channel]]\nunit = "volts"\ngain = 1\n', 2, "volts", 'unit = "V"'),
    "amperes of a divider": ('[[channel]]\nunit = "A"\nvolts_per_code = 1\ndivider = 9\n', 2, "gives volts", "clamp_a_per_v"),
    "volts of a clamp": ('[[channel]]\nunit = "V"\nvolts_per_code = 1\nclamp_a_per_v = 9\n', 2, "gives amperes", '"A"'),
    "as good as no scale": ("[[channel]]\ngain = 1e-320\n", 2, "scale is 0", "not 0"),
    "a channel with itself": ('[[pair]]\nvoltage = "a"\ncurrent = "a"\n', 3, "with itself", "voltage and a current"),
    "a pair twice": ('[[pair]]\nvoltage = "a"\ncurrent = "b"\n[[pair]]\nvoltage = "a"\ncurrent = "b"\n', 4, "twice", "remove one"),
    "an input without a name": ('[[channel]]\ninput = ""\n', 2, "nor a name", "input = 1"),
    "words of text": ('[logger]\nformat = "text"\ntype = "i16"\n', 3, "only of use with raw", "raw"),
    "raw words of nobody knows how many": ('[logger]\nformat = "raw"\ntype = "i16"\n', 3, "without channels", "channels = 2"),
    "more channels than a logger has": ("[[channel]]\n" * 33, 33, "33 channels", "32"),
}  # fmt: skip


@pytest.mark.parametrize("sentence", WRONG)
def test_a_mistake_is_told_with_its_line_and_the_fix(sentence):
    text, line, what, fix = WRONG[sentence]
    with pytest.raises(SetupError) as caught:
        parse(text, "panel.toml")
    assert caught.value.line == line, str(caught.value)
    assert what in str(caught.value)
    assert f"panel.toml, line {line}" in str(caught.value)
    assert fix in " ".join(caught.value.__notes__)


@pytest.mark.parametrize("text", [f"a = {'[' * 20000}", f"nominal_hz = {'9' * 5000}"])
def test_what_the_toml_reader_chokes_on_is_refused_in_a_sentence(text):
    with pytest.raises(SetupError, match="panel"):
        parse(text, "panel.toml")


def test_the_scale_of_a_converter_is_in_the_unit_as_written():
    text = '[[channel]]\nunit = "kV"\nvolts_per_code = 0.5\ndivider = 2000\n'
    (channel,) = parse(text, "p").channels
    assert (channel.unit, channel.gain) == ("kV", 1.0)  # 0.5 V x 2000 = 1000 V a code
    (bare,) = parse("[[channel]]\nadc_bits = 10\nadc_reference_v = 5.12\n", "p").channels
    assert (bare.unit, bare.gain) == ("V", pytest.approx(0.005))  # volts at the pin


def test_raw_words_are_described_with_their_particulars():
    said = parse('[logger]\nformat = "raw"\ntype = "i16"\nchannels = 3\nbyte_order = "big"\n', "p")
    assert said.format == "raw:i16:3:big"
    assert parse('[logger]\nformat = "raw"\nchannels = 2\n', "p").format == "raw:u16:2:little"
    assert parse('[logger]\nformat = "raw"\n', "p").format == "raw"


def test_names_are_cleaned_where_they_enter():
    setup = parse('site = "a\\u001b[2Jb\\u202e"\n[[channel]]\nname = "x\\ny"\n', "p")
    assert setup.site.isprintable()
    assert setup.channels[0].name == "x y"


@pytest.mark.parametrize("content", [b"\xff\xfe\x00", b"x" * (1 << 21)])
def test_a_file_that_is_no_setup(tmp_path, content):
    path = tmp_path / "bad.toml"
    path.write_bytes(content)
    with pytest.raises(SetupError):
        load(path)


def test_a_file_as_a_windows_editor_saves_it(tmp_path):
    path = tmp_path / "bom.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())
    assert load(path).site == "Riverside"
    path.write_bytes(b'limit_pct = 2\r\nsite = "K\xfcche"\r\n')  # not UTF-8
    with pytest.raises(SetupError, match="line 2: is not UTF-8"):
        load(path)


@pytest.mark.parametrize("name", [".", "/dev/zero"])
def test_a_path_that_is_no_file(name):
    with pytest.raises(SetupError, match="is not a file"):
        load(Path(name))


def test_a_file_that_is_not_there(tmp_path):
    with pytest.raises(SetupError, match="No such file"):
        load(tmp_path / "none.toml")


@settings(deadline=None, max_examples=200)
@given(st.text(max_size=200))
def test_any_text_is_a_setup_or_refused(text):
    try:
        parse(text, "any")
    except SetupError as error:
        assert str(error).isprintable()


values = st.one_of(
    st.booleans(), st.integers(), st.floats(allow_nan=True), st.just('"text"'), st.just("[1]"),
    st.just("{a = 1}"),
)  # fmt: skip
keys = st.sampled_from(
    ("site", "nominal_hz", "limit_pct", "reference", "channel", "pair", "logger", "other")
)


@settings(deadline=None, max_examples=200)
@given(st.dictionaries(keys, values, max_size=4))
def test_any_value_at_a_known_place_is_read_or_refused(table):
    lines = []
    for key, value in table.items():
        shown = str(value).lower() if isinstance(value, bool) else str(value)
        lines.append(f"{key} = {shown}")
    try:
        parse("\n".join(lines), "any")
    except SetupError as error:
        assert error.line is not None


def test_kinds_are_the_trade_words():
    assert [k.value for k in Kind] == ["voltage", "current", "other"]
