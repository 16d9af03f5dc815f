"""Tables of samples: every layout against the stdlib's reader and `float`, gaps, refusals."""

import csv
import io
import math
from datetime import datetime, timedelta

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from acquisition.errors import RecordingDamaged, RecordingRefused
from acquisition.recordings import csv_lines
from acquisition.recordings.csv_numbers import parse
from acquisition.recordings.open import open_recording
from acquisition.recordings.recording import RecordingOptions

SETS = 1500
T = np.arange(SETS) / 8000.0
U = 325.0 * np.sin(2.0 * np.pi * 50.0 * T)
I = 10.0 * np.sin(2.0 * np.pi * 50.0 * T - 0.5)  # noqa: E741 - the current
HEADER = "time [s],U [V],I [A]\n"


def rows(line="{t:.6f},{u:.3f},{i:.4f}\n", t=T):
    return "".join(
        line.format(t=float(a), u=float(b), i=float(c)) for a, b, c in zip(t, U, I, strict=True)
    )


def write(tmp_path, text, name="table.csv", encoding="utf-8"):
    path = tmp_path / name
    path.write_bytes(text.encode(encoding))
    return path


def read(path, rate=None):
    recording = open_recording(path, RecordingOptions(rate=rate))
    blocks = list(recording.blocks())
    recording.close()
    return recording.info, blocks, np.concatenate([b.codes for b in blocks], axis=1)


def places(blocks):
    return [(b.index, b.sets, b.lost_before) for b in blocks]


def stamped(form, cell=None):
    begin = datetime(2031, 5, 3, 23, 59, 59, 900000)  # midnight comes 0.1 s later
    return "stamp,U [V],I [A]\n" + "".join(
        f"{form(begin + timedelta(seconds=float(t)))},{u:.3f},{i:.4f}\n"
        for t, u, i in zip(T, U, I, strict=True)
    )


# sentence: what the file holds
LAYOUTS = {
    "plain": HEADER + rows(),
    "line ends of two characters": (HEADER + rows()).replace("\n", "\r\n"),
    "line ends of carriage returns": (HEADER + rows()).replace("\n", "\r"),
    "a byte order mark": "\ufeff" + HEADER + rows(),
    "semicolons and decimal commas": (HEADER + rows()).replace(",", ";").replace(".", ","),
    "tabs": (HEADER + rows()).replace(",", "\t"),
    "tabs and decimal commas": (HEADER + rows()).replace(",", "\t").replace(".", ","),
    "blanks in columns": "# time U[V] I[A]\n" + rows(" {t:.6f}  {u:9.3f}   {i:.4f}\n"),
    "a blank after each comma": HEADER + rows("{t:.6f}, {u:.3f}, {i:.4f}\n"),
    "a separator at each end": HEADER.strip() + ",\n" + rows("{t:.6f},{u:.3f},{i:.4f},\n"),
    "quotes": '"time","U [V]","I [A]"\n' + rows('"{t:.6f}","{u:.3f}","{i:.4f}"\n'),
    "quotes around decimal commas": '"time","U [V]","I [A]"\n'
    + rows('"{t:.6f}","{u:.3f}","{i:.4f}"\n').replace(".", ","),
    "powers of ten": HEADER + rows("{t:.9e},{u:.18e},{i:.7E}\n"),
    "every digit": HEADER + rows("{t!r},{u!r},{i!r}\n"),
    "milliseconds": "time [ms],U [V],I [A]\n" + rows(t=T * 1e3),
    "microseconds": "t_us,U (V),I (A)\n" + rows("{t:.0f},{u:.3f},{i:.4f}\n", t=T * 1e6),
    "the time last": "U/V,I/A,time\n" + rows("{u:.3f},{i:.4f},{t:.6f}\n"),
    "units in a line of their own": "Time,U,I\n(s),(V),(A)\n" + rows(),
    "an instrument's words first": f"Model,X\nPoints;{SETS}\n\n" + HEADER + rows(),
    "stamps": stamped(lambda m: m.isoformat(timespec="microseconds")),
    "stamps with a zone": stamped(lambda m: m.isoformat(timespec="microseconds") + "+02:00"),
    "stamps with Z": stamped(lambda m: m.isoformat(" ", timespec="microseconds") + "Z"),
    "clock times past midnight": stamped(lambda m: m.strftime("%H:%M:%S.%f")),
    "a date and a clock": stamped(lambda m: m.strftime("%d.%m.%Y,%H:%M:%S.%f")).replace(
        "stamp", "date,clock"
    ),
}


@pytest.mark.parametrize("sentence", LAYOUTS)
def test_a_layout_is_read_as_it_is(tmp_path, sentence, monkeypatch):
    path = write(tmp_path, LAYOUTS[sentence])
    info, blocks, codes = read(path)
    assert info.rate == 8000.0
    assert [(c.name, c.unit) for c in info.channels] == [("U", "V"), ("I", "A")]
    assert [b.gap_before for b in blocks] == [False] * len(blocks)
    assert codes.shape == (2, SETS)
    assert np.abs(codes[0] - U).max() <= 0.5001e-3  # printed to 3 decimals
    assert np.abs(codes[1] - I).max() <= 0.5001e-4
    # The same, however the file is cut into pieces.
    for size in (997, 4099):
        monkeypatch.setattr(csv_lines, "PIECE", size)
        _, blocks, again = read(path)
        assert np.array_equal(again, codes)
        assert not any(b.gap_before for b in blocks)


def test_wide_characters_are_read(tmp_path):
    info, _, codes = read(
        write(tmp_path, HEADER.replace("U", "Spänning") + rows(), "w.csv", "utf-16")
    )
    assert info.channels[0].name == "Spänning"
    assert codes.shape == (2, SETS)


def test_names_that_are_not_utf8_are_read(tmp_path):
    info, _, _ = read(write(tmp_path, HEADER.replace("U", "Spänning") + rows(), "l.csv", "latin-1"))
    assert info.channels[0].name == "Spänning"


def test_names_are_made_harmless_and_different(tmp_path):
    text = "time [s],\x1b[2JU,U,U,\n" + rows("{t:.6f},{u:.3f},{i:.4f},1,2\n")
    info, _, _ = read(write(tmp_path, text))
    assert [c.name for c in info.channels] == ["[2JU", "U", "U (2)", "ch4"]


def test_a_stamp_tells_when_it_began(tmp_path):
    info, _, _ = read(write(tmp_path, LAYOUTS["stamps with a zone"]))
    assert info.started == "2031-05-03T23:59:59.900000+02:00"


# -- numbers -------------------------------------------------------------------------------------

plain = st.from_regex(r"[+-]?([0-9]{1,9}(\.[0-9]{0,9})?|\.[0-9]{1,9})", fullmatch=True)
odd = st.sampled_from(
    ["", ".", "-", "+.", "OL", "nan", "1e5", "--1", "1-", "1.2.3", "1:2", " 1", "1 ", "0x1", "1_0"]
)
digits = st.from_regex(r"-?[0-9.]{1,20}", fullmatch=True)


@settings(deadline=None, max_examples=150)
@given(st.lists(st.lists(plain | odd | digits, min_size=1, max_size=4), min_size=1, max_size=12))
def test_what_the_fast_road_reads_is_what_float_reads(table):
    """Reference: Python's float, correctly rounded."""
    columns = len(table[0])
    text = "".join(";".join(cells) + "\n" for cells in table).encode()
    found = parse(text, ord(";"), ord("."), columns)
    assert len(found.odd) == len(table)
    for line, cells in enumerate(table):
        assert text[found.starts[line] : found.ends[line]] == ";".join(cells).encode()
        if found.odd[line]:
            # Left for the slow road: never a short plain line.
            plainly = all(c.strip("+-").replace(".", "", 1).isdigit() for c in cells)
            signs = any(c.strip("+-") != c.lstrip("+-") or c[:2].strip("+-") == "" for c in cells)
            long = any(len(c) > 16 or len(c.replace(".", "")) > 15 for c in cells)
            assert len(cells) != columns or not plainly or signs or long
            continue
        assert len(cells) == columns
        for column, cell in enumerate(cells):
            value = found.table[column, line]
            assert value == float(cell)
            assert np.signbit(value) == cell.startswith("-")


@settings(deadline=None, max_examples=120)
@given(
    st.lists(
        st.lists(st.decimals(-9999, 9999, places=4), min_size=2, max_size=2),
        min_size=4,
        max_size=60,
    ),
    st.sampled_from([(",", "."), (";", ","), ("\t", "."), ("\t", ","), (";", ".")]),
    st.sampled_from(["\n", "\r\n"]),
    st.sets(st.integers(1, 59)),
    st.sampled_from(["OL", "", "nan", "-inf", "n/a", "---"]),
)
def test_any_table_comes_back(tmp_path_factory, values, marks, end, bad, word):
    """Reference: the stdlib's csv reader and float; bad cells are gaps of one set."""
    separator, decimal = marks
    lines = [separator.join(("time [s]", "U [V]", "I [A]"))]
    bad = {k for k in bad if k < len(values) - 1}
    for k, (u, i) in enumerate(values):
        cells = [f"{k / 4000:.6f}", f"{u}", word if k in bad else f"{i}"]
        lines.append(separator.join(cells).replace(".", decimal))
    text = end.join(lines) + end
    path = tmp_path_factory.mktemp("any") / "any.csv"
    path.write_text(text, newline="")
    if len(bad) > 0.3 * len(values):
        return  # few good rows in a row: whether a table is seen at all is another matter
    info, blocks, codes = read(path)
    expected = [
        [float(cell.replace(decimal, ".")) for cell in row[1:]]
        for k, row in enumerate(csv.reader(io.StringIO(text), delimiter=separator))
        if k > 0 and k - 1 not in bad
    ]
    assert info.rate == 4000.0
    assert np.array_equal(codes, np.array(expected).T)
    at = [b.index + k for b in blocks for k in range(b.sets)]
    assert at == [k for k in range(len(values)) if k not in bad]


# -- gaps ----------------------------------------------------------------------------------------


def test_a_cell_that_is_no_number_is_a_gap_of_its_set(tmp_path):
    lines = rows().splitlines()
    lines[400] = "0.050000,OL,3.1"
    lines[500:503] = ["0.0625,,", "0.062625,1,inf", "0.06275,nan,3"]
    _, blocks, codes = read(write(tmp_path, HEADER + "\n".join(lines) + "\n"))
    assert places(blocks) == [(0, 400, 0), (401, 99, 1), (503, SETS - 503, 3)]
    assert codes[1, 400] == pytest.approx(I[401], abs=1e-4)


@pytest.mark.parametrize("cell", [" ", "\t", "", "-", "+", ".", "1e", "0x1", "1_0", "1 2", "٣"])
@pytest.mark.parametrize("near", ["1e0", "1"])
def test_a_cell_that_only_looks_like_a_number_is_none(tmp_path, cell, near):
    lines = rows().splitlines()
    lines[700] = f"0.0875,{near},{near}"
    lines[701] = f"0.087625,{near},{cell}"
    _, blocks, _ = read(write(tmp_path, HEADER + "\n".join(lines) + "\n"))
    assert [(b.index, b.lost_before) for b in blocks] == [(0, 0), (702, 1)]


def test_without_a_time_column_a_bad_line_counts_as_one_set(tmp_path):
    lines = rows("{u:.3f},{i:.4f}\n").splitlines()
    lines[10] = "what is this"
    lines[20] = lines[20] + "," + lines[21]  # two lines run into one
    lines[30] = ""  # nothing is lost by a blank line or a remark
    lines[40] = "# a remark"
    _, blocks, _ = read(write(tmp_path, "U [V],I [A]\n" + "\n".join(lines) + "\n"), 8000.0)
    assert places(blocks) == [(0, 10, 0), (11, 9, 1), (21, SETS - 23, 1)]


def test_a_step_in_time_is_a_gap_of_as_many_sets(tmp_path):
    lines = rows().splitlines()
    del lines[700:745]
    _, blocks, _ = read(write(tmp_path, HEADER + "\n".join(lines) + "\n"))
    assert places(blocks) == [(0, 700, 0), (745, SETS - 745, 45)]


def test_a_gap_and_bad_cells_are_not_counted_twice_across_pieces(tmp_path, monkeypatch):
    lines = rows().splitlines()
    for k in range(100, 160):
        lines[k] = f"{k / 8000:.6f},OL,OL"
    del lines[160:170]
    path = write(tmp_path, HEADER + "\n".join(lines) + "\n")
    for size in (1 << 19, 40, 97, 512):
        monkeypatch.setattr(csv_lines, "PIECE", size)
        _, blocks, _ = read(path)
        assert [(b.index, b.lost_before) for b in blocks if b.gap_before] == [(170, 70)]


def test_sample_numbers_show_gaps(tmp_path):
    numbers = np.delete(np.arange(SETS), slice(50, 60))
    text = "n,U [V]\n" + "".join(f"{n},{U[n]:.3f}\n" for n in numbers)
    info, blocks, _ = read(write(tmp_path, text), 8000.0)
    assert [c.name for c in info.channels] == ["U"]
    assert places(blocks) == [(0, 50, 0), (60, SETS - 60, 10)]


def test_time_that_runs_backwards_is_a_gap_of_unknown_length(tmp_path):
    _, blocks, _ = read(write(tmp_path, HEADER + rows() + rows()))
    assert places(blocks) == [(0, SETS, 0), (SETS, SETS, None)]


def test_an_empty_column_does_not_make_gaps_of_everything(tmp_path):
    info, blocks, codes = read(
        write(tmp_path, "time [s],U [V],spare,I [A]\n" + rows("{t:.6f},{u:.3f},,{i:.4f}\n"))
    )
    assert [c.name for c in info.channels] == ["U", "I"]
    assert codes.shape == (2, SETS)
    assert len(blocks) == 1
    assert "spare" in info.notes[0]


# -- the rate ------------------------------------------------------------------------------------


def test_a_rate_that_is_printed_rounded_is_found(tmp_path):
    # 22.7 µs printed to 1 µs: steps of 22 and 23
    info, blocks, _ = read(write(tmp_path, HEADER + rows(t=np.arange(SETS) / 44100.0)))
    assert info.rate == 44100.0
    assert len(blocks) == 1


def test_coarse_times_repeat_and_their_span_tells_the_rate(tmp_path):
    times = np.floor(T * 1000.0) / 1000.0
    info, blocks, _ = read(write(tmp_path, HEADER + rows("{t:.3f},{u:.3f},{i:.4f}\n", t=times)))
    # known to within a line at each end: 2 of 1500 (closed form)
    assert info.rate == pytest.approx(8000.0, rel=2.0 / SETS)
    assert len(blocks) == 1
    assert any("coarse" in note for note in info.notes)


def test_uneven_times_are_read_evenly_and_said_to_be_so(tmp_path):
    rng = np.random.default_rng(11)
    late = np.convolve(rng.standard_normal(SETS + 99), np.ones(100) / 100.0, "valid")
    times = T + 8e-4 * late  # wanders by about a step and more
    info, _, _ = read(write(tmp_path, HEADER + rows("{t:.9f},{u:.3f},{i:.4f}\n", t=times)))
    assert info.rate == pytest.approx(8000.0, rel=0.01)
    assert any("uneven" in note for note in info.notes)


def test_the_persons_rate_goes_before_the_times(tmp_path):
    info, _, _ = read(write(tmp_path, HEADER + rows()), 8003.0)
    assert info.rate == 8003.0
    assert any("--rate 8003" in note for note in info.notes)


def test_a_rate_that_changes_ends_the_reading_there(tmp_path):
    recording = open_recording(
        write(tmp_path, HEADER + rows() + rows(t=SETS / 8000.0 + 2.0 * T)), RecordingOptions()
    )
    read_sets = 0
    with pytest.raises(RecordingDamaged, match=r"beyond line 150[12]"):
        for block in recording.blocks():
            read_sets += block.sets
    assert abs(read_sets - SETS) <= 1


def test_whole_numbers_may_turn_out_to_have_decimal_commas(tmp_path):
    text = "U [V];I [A]\n" + "1;2\n" * 30000 + "1,5;2,25\n"
    _, blocks, codes = read(write(tmp_path, text), 8000.0)
    assert codes[:, -1].tolist() == [1.5, 2.25]
    assert not any(b.gap_before for b in blocks)


def test_two_columns_of_whole_numbers_are_told_from_decimals(tmp_path):
    whole = "".join(f"{512 + int(u)},{510 + int(10 * i)}\n" for u, i in zip(U, I, strict=True))
    _, _, codes = read(write(tmp_path, whole), 8000.0)
    assert codes.shape == (2, SETS)
    decimals = "".join(f"{u:.2f}\n" for u in U).replace(".", ",")
    _, _, codes = read(write(tmp_path, decimals), 8000.0)
    assert codes.shape == (1, SETS)
    assert np.abs(codes[0] - U).max() < 0.0051


# sentence: (what the file holds, what the refusal says, what the advice says)
REFUSED = {
    "no header and a comma": (
        "0,5\n1,5\n2,7\n", r"two ways.*0,5.*1 column .0\.5.*2 columns .0 \| 5", "header"
    ),
    "thousands": ("1.000,5;2.345,1\n1.100,5;2.3,1\n", "line 1 .*thousands", "without thousands"),
    "a comma in every number": (
        "time [s],U [V]\n0,0,1,5\n0,1,2,5\n", "line 2.*4 columns, or 2", "semicolons"
    ),
    "a header of other length": (
        "time [s],U [V]\n0,1,2\n1,2,3\n", "line 1 names 2 columns.*3", "name"
    ),
    "no time and no rate": ("U [V]\n1\n2\n3\n", "no time column", "--rate"),
    "one sample": ("time [s],U [V]\n0,1\n", "no rate can be told", "--rate"),
    "time alone": ("time [s]\n0\n1\n2\n", "no column of samples", "samples"),
    "a unit of time that is none": ("time [h],U\n0,1\n1,2\n", "unit.*h.*not known", "time .ms."),
    "unnamed time in an unknown unit": (
        "".join(f"{0.125 * k},{k % 7}\n" for k in range(40)), "which unit", "time .ms."
    ),
    "words": ("Dear reader,\nthere is nothing here.\n", "no rows of numbers.*line 2", "header"),
    "nothing but a header": (HEADER, "no rows of numbers", "header"),
    "nothing but blank lines": ("\n\n \n", "blank lines", "right file"),
    "nothing but nan": (HEADER + "nan,nan,nan\n" * 9, "no rows of numbers", "header"),
}  # fmt: skip


@pytest.mark.parametrize("sentence", REFUSED)
def test_what_does_not_read_one_way_is_refused(tmp_path, sentence):
    text, said, advice = REFUSED[sentence]
    with pytest.raises(RecordingRefused, match=said) as refusal:
        open_recording(write(tmp_path, text), RecordingOptions())
    assert "table.csv" in str(refusal.value)
    notes = " ".join(refusal.value.__notes__)
    assert advice.replace(".", "") in notes.replace("[", "").replace("]", "")


# sentence: (what follows good lines, what the damage says)
DAMAGED = {
    "a line cut in its middle": ("0.1875,1", r"cut short in line 1502"),
    "a cell cut off": ("0.1875,1,", r"cut short in line 1502"),
    "another table": ("1,2\n" * 2000, r"from line 1502 on .* 3 columns any more: 1,2"),
    "a line without end": ("1" * 3_000_000, "a line has no end"),
}


@pytest.mark.parametrize("sentence", DAMAGED)
def test_damage_further_on_keeps_what_came_before(tmp_path, sentence, monkeypatch):
    monkeypatch.setattr(csv_lines, "PIECE", 1 << 14)
    after, said = DAMAGED[sentence]
    recording = open_recording(write(tmp_path, HEADER + rows() + after), RecordingOptions())
    sets = 0
    with pytest.raises(RecordingDamaged, match=said):
        for block in recording.blocks():
            sets += block.sets
    assert sets >= 0.8 * SETS


def test_infinite_and_huge_times_end_in_no_traceback(tmp_path):
    text = HEADER + rows() + "1e300,1,2\n1e301,1,2\n"
    _, blocks, _ = read(write(tmp_path, text))
    assert blocks[-1].gap_before
    assert blocks[-1].lost_before is None
    assert math.isfinite(float(blocks[-1].index))
