"""Dots of a trace against what geometry says."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tui.plot import bars, characters, row_of, ticks, trace_dots

KINDS = ("braille", "block", "half", "ascii")


@pytest.mark.parametrize("glyphs", KINDS)
def test_a_full_scale_sine_touches_top_and_bottom(glyphs):
    wave = np.sin(2.0 * np.pi * np.arange(1600) / 800.0)
    dots = trace_dots(wave, -1.0, 1.0, 40, 10, glyphs)
    assert dots[0].any()
    assert dots[-1].any()
    # Closed form: two cycles are at their tops a quarter and five eighths of the width in.
    tops = np.flatnonzero(dots[0]) / dots.shape[1]
    assert np.abs(tops[:, None] - np.array([0.125, 0.625])).min(axis=1).max() < 0.06


@pytest.mark.parametrize("glyphs", KINDS)
def test_a_trace_has_no_holes_at_a_steep_edge(glyphs):
    step = np.where(np.arange(1000) < 500, -1.0, 1.0)
    dots = trace_dots(step, -1.0, 1.0, 30, 8, glyphs)
    assert dots.any(axis=1).all()  # the edge is drawn through every row
    assert dots.any(axis=0).all()


@pytest.mark.parametrize("glyphs", KINDS)
def test_a_gap_stays_empty(glyphs):
    wave = np.where((np.arange(3000) >= 1000) & (np.arange(3000) < 2000), np.nan, 0.5)
    dots = trace_dots(wave, 0.0, 1.0, 30, 4, glyphs)
    third = dots.shape[1] // 3
    assert not dots[:, third : 2 * third].any()
    assert dots[:, :third].any(axis=0).all()


def test_braille_cells_are_the_unicode_patterns():
    # Unicode 15, block Braille Patterns: dots 1 to 8 are bits 0 to 7; dots 7 and 8 are the lowest.
    dots = np.zeros((4, 2), bool)
    dots[0, 0] = dots[3, 1] = True  # dots 1 and 8
    assert characters(dots, "braille")[0, 0] == chr(0x2800 + 0x01 + 0x80)
    assert characters(np.ones((4, 2), bool), "braille")[0, 0] == "⣿"
    assert characters(np.zeros((4, 2), bool), "braille")[0, 0] == " "


def test_ascii_stays_ascii():
    wave = np.sin(np.arange(500) / 9.0)
    text = "".join(characters(trace_dots(wave, -1, 1, 30, 6, "ascii"), "ascii").ravel())
    assert text.isascii()
    assert all(row.isascii() for row in bars(np.array([0.0, 0.5, 1.0]), 4, "ascii"))


@pytest.mark.parametrize(
    ("low", "high", "most", "expected"),
    [
        (-330.0, 330.0, 7, [-300, -200, -100, 0, 100, 200, 300]),
        (0.0, 1.0, 5, [0, 0.2, 0.4, 0.6, 0.8, 1.0]),
    ],
)
def test_ticks_are_round(low, high, most, expected):
    assert ticks(low, high, most) == pytest.approx(expected)


def test_bars_fill_by_their_share():
    lines = bars(np.array([1.0, 0.5, 0.0]), 4, "block")
    assert [row[0] for row in lines] == ["█"] * 4
    assert [row[1] for row in lines] == [" ", " ", "█", "█"]
    assert [row[2] for row in lines] == [" "] * 4


def test_rows_of_values():
    assert row_of(1.0, 0.0, 1.0, 10) == 0
    assert row_of(0.0, 0.0, 1.0, 10) == 9
    assert row_of(1.1, 0.0, 1.0, 10) is None


@settings(deadline=None, max_examples=60)
@given(
    st.lists(st.floats(allow_nan=True, allow_infinity=False, width=32), min_size=0, max_size=300),
    st.integers(1, 60),
    st.integers(1, 20),
    st.sampled_from(KINDS),
)
def test_any_samples_make_a_picture_of_the_asked_size(samples, width, height, glyphs):
    drawn = characters(trace_dots(np.array(samples), -1.0, 1.0, width, height, glyphs), glyphs)
    assert drawn.shape == (height, width)
