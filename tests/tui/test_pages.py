"""Pages as text: what stands on them at each size, and that nothing a stream says breaks them."""

import dataclasses
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from rich.cells import cell_len

from acquisition.status import LinkState, ReaderStatus
from dsp.window import Flag
from shift.snapshot import Stage
from tui.digits import large
from tui.figures import Steady
from tui.lines import ascii_only, fit, plain, width_of
from tui.palette import PALETTES, palette
from tui.screens import now, papers, wave
from tui.screens.page import View

SIZES = [(80, 24), (120, 40), (200, 60)]


@pytest.mark.parametrize(("width", "height"), [*SIZES, (79, 24), (40, 12), (20, 3), (1, 1)])
@pytest.mark.parametrize("draw", [now.draw, wave.draw])
@pytest.mark.parametrize("channels", [0, 1, 2, 4, 32])
def test_a_page_fills_its_size_exactly(snapshot, draw, width, height, channels):
    lines = draw(snapshot(channels), View(), width, height)
    assert len(lines) == height
    assert all(width_of(line) == width for line in lines)


@pytest.mark.parametrize(("width", "height"), SIZES)
def test_now_shows_what_is_needed(snapshot, width, height):
    text = plain(now.draw(snapshot(2), View(), width, height))
    for needed in (
        "way 1", "way 2", "true RMS", "averaging meter would show", "85", "misleads", "agrees",
        "36.2 % low", "crest factor 1.600", "THD-F 48.4 %", "50.012 Hz", "128 lost",
        "/dev/ttyACM0", "A mean-responding meter would show",
    ):  # fmt: skip
        assert needed in text, needed


@pytest.mark.parametrize(("width", "height"), SIZES)
def test_wave_explains_the_disagreement(snapshot, width, height):
    text = plain(wave.draw(snapshot(2), View(), width, height))
    for needed in (
        "A mean-responding meter would show 85.17 V here. It is 133.50 V: 36.2 % low.",
        "true RMS 133.50 V", "averaging meter 85.17 V", "highest", "lowest", "harmonics",
        "THD-F to order 50",
    ):  # fmt: skip
        assert needed in text, needed


def test_the_smallest_page_says_that_it_is_small(snapshot):
    text = plain(now.draw(snapshot(2), View(), 60, 10))
    assert "tiles only" in text
    assert "misleads" in text


def test_every_channel_can_be_reached_by_scrolling(snapshot):
    view = View()
    seen = ""
    for first in range(32):
        view.first = first
        seen += plain(now.draw(snapshot(32), view, 80, 24))
    assert all(f" way {k} " in seen for k in range(1, 33))
    assert "of 32" in seen


def test_a_page_without_colour_still_tells_the_states(snapshot):
    """State is a word and a shape: the text alone, without any style, tells it."""
    for glyphs in ("braille", "ascii"):
        lines = now.draw(snapshot(2, ("Büro", "way 2")), View(glyphs=glyphs), 80, 24)
        text = plain(ascii_only(lines) if glyphs == "ascii" else lines)
        assert all(width_of(line) == 80 for line in ascii_only(lines))
        assert "misleads" in text
        assert "agrees" in text
        if glyphs == "ascii":
            assert text.isascii()


def test_hostile_names_are_only_text(snapshot):
    names = ("[/x][bold]", "[link=file:///]a", "名前の長いチャンネル" * 3)
    for draw in (now.draw, wave.draw):
        for width, height in SIZES:
            lines = draw(snapshot(3, names), View(), width, height)
            assert all(width_of(line) == width for line in lines)
    assert "[/x][bold]" in plain(now.draw(snapshot(3, names), View(), 120, 40))


@pytest.mark.parametrize("stage", list(Stage))
def test_a_stage_without_figures_is_said_large(snapshot, stage):
    waiting = snapshot(
        0,
        stage=stage,
        words="There is no port /dev/ttyACM0.",
        stream=ReaderStatus(LinkState.GONE, "/dev/ttyACM0", advice=("plug the logger in",)),
        window=None,
    )
    for draw in (now.draw, wave.draw):
        text = plain(draw(waiting, View(), 80, 24))
        assert "There is no port /dev/ttyACM0." in text
        assert "plug the logger in" in text


def test_figures_that_do_not_exist_are_dashes(snapshot):
    whole = snapshot(1)
    view = whole.channels[0]
    reading = dataclasses.replace(
        view.reading,
        rms=0.0, cycles=0, frequency=math.nan, crest_factor=math.nan, thd_f=math.nan,
        fundamental=math.nan, averaging_error=math.nan, firing_angle=math.nan,
        harmonics=np.empty(0, complex), flags=Flag.UNLOCKED | Flag.LOW_SIGNAL,
    )  # fmt: skip
    verdict = dataclasses.replace(view.verdicts[0], error=math.nan, reading=math.nan)
    dead = dataclasses.replace(
        whole,
        channels=(dataclasses.replace(view, reading=reading, verdicts=(verdict,)),),
        window=dataclasses.replace(whole.window, cycles=0),
    )
    for draw in (now.draw, wave.draw):
        for width, height in SIZES:
            text = plain(draw(dead, View(), width, height))
            assert "nan" not in text
    assert "no steady frequency" in plain(now.draw(dead, View(), 80, 24))


def test_cautions_fit_the_smallest_screen(snapshot):
    from shift.wording import CAUTION_TITLE, CAUTIONS

    text = plain(papers.cautions(CAUTION_TITLE, CAUTIONS, 80, 24, False))
    for sentence in CAUTIONS:
        assert sentence.split()[-1] in text
    assert "enter" in text


def test_large_digits_have_one_width():
    for rows in (3, 5):
        for plainest in (True, False):
            glyphs = [large(c, rows, plainest) for c in "0123456789- "]
            assert {cell_len(line) for glyph in glyphs for line in glyph} == {4 if rows == 3 else 6}
            drawn = {"\n".join(glyph) for glyph in glyphs}
            assert len(drawn) == 12  # no two digits look alike


def test_a_figure_at_the_border_of_a_digit_does_not_jump():
    steady = Steady()
    rng = np.random.default_rng(3)
    widths = set()
    for _ in range(200):
        u = 0.05 * (1.0 + 0.1 * rng.standard_normal())  # 2u = 0.1: the border of one decimal
        widths.add(len(steady.figure("a", 230.0 + u * rng.standard_normal(), u, "V")[0]))
    assert len(widths) <= 2
    shown = [steady.figure("a", 230.0, 0.05, "V")[0] for _ in range(5)]
    assert len(set(shown)) == 1


def test_no_digit_is_shown_that_is_not_known():
    assert Steady().figure("a", 230.04, 0.6, "V") == ("230", "V")
    assert Steady().figure("a", 230.04, 0.02, "V") == ("230.04", "V")
    assert Steady().figure("a", 0.01234, 0.0001, "A") == ("12.3", "mA")


@settings(deadline=None, max_examples=80)
@given(st.lists(st.tuples(st.text(max_size=20), st.just("text")), max_size=5), st.integers(0, 60))
def test_fit_gives_exactly_the_width(line, width):
    line = [("".join(c for c in t if c.isprintable()), m) for t, m in line]
    assert width_of(fit(line, width)) == width


def _luminance(colour: str) -> float:
    """Relative luminance, WCAG 2.1 (from memory, not read)."""
    parts = [int(colour[k : k + 2], 16) / 255.0 for k in (1, 3, 5)]
    linear = [p / 12.92 if p <= 0.03928 else ((p + 0.055) / 1.055) ** 2.4 for p in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


@pytest.mark.parametrize("theme", list(PALETTES))
def test_text_stands_out_from_its_background(theme):
    """Contrast of at least 4.5 to 1, WCAG 2.1 success criterion 1.4.3 (from memory, not read)."""
    chosen = palette(theme)
    ground = _luminance(chosen.background)
    for name, style in chosen.styles.items():
        ink = _luminance(style.color.name)
        ratio = (max(ink, ground) + 0.05) / (min(ink, ground) + 0.05)
        assert ratio >= (3.0 if name == "rule" else 4.5), (name, ratio)


def test_the_mono_theme_has_no_colour():
    assert all(style.color is None for style in palette("mono").styles.values())
