"""A setup: read as written, refused with its line and the fix."""

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
    assert load_.rails == (0.0, 4095.0)
    assert setup.pairs == (("mains", "load"),)


def test_nothing_is_required():
    assert parse("", "x") == Setup(where="x")


# what is wrong: (text, line, words of the message, words of the advice)
WRONG = {
    "no TOML": ("site = \n", 1, "TOML", "docs/setup.md"),
    "cut text": ('site = "x', 1, "TOML", "docs/setup.md"),
    "a key with a slip": ("\n\nnominal = 50\n", 3, "nominal", "nominal_hz"),
    "a slip in a channel": ('[[channel]]\nname = "a"\ngian = 2\n', 3, "gian", "gain"),
    "text for a number": ('limit_pct = "two"\n', 1, "not a number", "limit_pct = 1.0"),
    "a number for text": ("site = 4\n", 1, "not text", "quotes"),
    "out of range": ("nominal_hz = 400\n", 1, "out of range", "40 to 70"),
    "not finite": ("limit_pct = nan\n", 1, "out of range", "0.01"),
    "one rail": ("[[channel]]\ncode_min = 0\n", 2, "go together", "code_max"),
    "a divider of nothing": ("[[channel]]\ndivider = 200\n", 2, "what a code is worth", "adc_bits"),
    "two scales": ("[[channel]]\ngain = 1\ndivider = 200\nvolts_per_code = 1\n", 2, "already", "remove"),
    "divider and clamp": ("[[channel]]\nvolts_per_code = 1\ndivider = 1\nclamp_a_per_v = 1\n", 4, "not both", "remove"),
    "no scale": ("[[channel]]\ngain = 0\n", 2, "scale is 0", "not 0"),
    "twins": ('[[channel]]\nname = "a"\n[[channel]]\nname = "a"\n', 2, "two channels", "own name"),
    "a lone pair": ('[[pair]]\nvoltage = "a"\n', 1, "voltage and a current", "current"),
    "one bracket": ('[channel]\nname = "a"\n', 1, "list of tables", "[[channel]]"),
    "an unknown kind": ('[[channel]]\nkind = "heat"\n', 2, "kind", "voltage"),
    "an unknown format": ('[logger]\nformat = "morse"\n', 2, "morse", "crestwire"),
    "an input that is none": ("[[channel]]\ninput = 0\n", 2, "input", "first channel"),
    "an unknown scale of truth": ("[[channel]]\ninvert = true\n", 2, "scale", "gain"),
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
