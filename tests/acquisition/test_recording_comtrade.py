"""COMTRADE: files written here by the rules, read by us and by the independent package `comtrade`.

The order of fields is from memory of IEEE C37.111, not read; the package is the second opinion.
"""

import math
import struct

import comtrade
import numpy as np
import pytest

from acquisition.errors import RecordingAbsent, RecordingDamaged, RecordingRefused
from acquisition.recordings.comtrade import ComtradeRecording
from acquisition.recordings.open import open_recording
from acquisition.recordings.recording import RecordingOptions

N = 700
CODES = np.stack(
    [
        np.rint(20000.0 * np.sin(2.0 * np.pi * 50.0 * np.arange(N) / 4800.0)),
        np.rint(-900.0 * np.cos(2.0 * np.pi * 50.0 * np.arange(N) / 4800.0) + 12.0),
    ]
).astype(np.int64)
GAIN, OFFSET = (0.0152587890625, 0.5), (0.25, -3.0)
HEAD = {1991: "Depot,7", 1999: "Depot,7,1999", 2013: "Depot,7,2013"}


def cfg(kind="BINARY", year=1999, status=0, sets=N, rates="1\n4800,{n}\n", **words):
    date = "05/31/1998" if year == 1991 else "31/05/2027"
    lines = [
        words.get("head", HEAD[year]),
        words.get("counts", f"{2 + status},2A,{status}D"),
        words.get("first", f"1,VA,A,bus,kV,{GAIN[0]},{OFFSET[0]},0.0,-32767,32767,110,0.1,P"),
        words.get("second", f"2,IA,A,bus,A,{GAIN[1]},{OFFSET[1]},2.5,-32767,32767,400,5,S"),
        *(f"{k + 1},D{k + 1},,,0" for k in range(status)),
        "50",
        rates.format(n=sets).strip(),
        f"{date},12:34:56.250000",
        f"{date},12:34:56.350000",
        kind,
    ]
    if year > 1991:
        lines.append("1")
    if year == 2013:
        lines += ["+1h,+1h", "0,0"]
    return "\n".join(lines) + "\n"


def dat(kind="BINARY", status=0, codes=CODES, numbers=None):
    numbers = np.arange(1, codes.shape[1] + 1) if numbers is None else numbers
    out = []
    for k, n in enumerate(numbers):
        t = int(n) * 208
        x = codes[:, k].tolist()
        if kind == "ASCII":
            cells = ["" if math.isnan(v) else f"{v:g}" if v % 1 else f"{int(v)}" for v in x]
            bits = [str(k % 2)] * status
            out.append((",".join([str(n), str(t), *cells, *bits]) + "\r\n").encode())
            continue
        letter = {"BINARY": "h", "BINARY32": "i", "FLOAT32": "f"}[kind]
        form = f"<II{len(x)}{letter}{(status + 15) // 16}H"
        out.append(struct.pack(form, n, t, *x, *[k % 65536] * ((status + 15) // 16)))
    return b"".join(out)


def pair(folder, description, data, name="x"):
    path = folder / f"{name}.cfg"
    path.write_bytes(description if isinstance(description, bytes) else description.encode())
    (folder / f"{name}.dat").write_bytes(data)
    return path


def read(path, **options):
    recording = open_recording(path, RecordingOptions(**options))
    blocks = list(recording.blocks())
    recording.close()
    return recording.info, blocks


def values(info, blocks):
    codes = np.concatenate([b.codes for b in blocks], axis=1).astype(np.float64)
    gain = np.array([[c.gain] for c in info.channels])
    offset = np.array([[c.offset_codes] for c in info.channels])
    return gain * (codes + offset)


@pytest.mark.parametrize("year", [1991, 1999, 2013])
@pytest.mark.parametrize("kind", ["ASCII", "BINARY", "BINARY32", "FLOAT32"])
@pytest.mark.parametrize("status", [0, 16, 17])
def test_every_kind_and_year_is_read_as_the_independent_reader_does(tmp_path, year, kind, status):
    codes = CODES / 64.0 if kind == "FLOAT32" else CODES
    path = pair(tmp_path, cfg(kind, year, status), dat(kind, status, codes))
    info, blocks = read(path)
    other = comtrade.load(str(path), use_double_precision=True)
    expected = np.array(other.analog) * np.array([[1000.0], [1.0]])  # kV comes out as V
    # One rounding more in gain * (x + b / a) than in a * x + b.
    assert np.allclose(values(info, blocks), expected, rtol=1e-12, atol=1e-9)
    assert [(c.name, c.unit) for c in info.channels] == [("VA", "V"), ("IA", "A")]
    assert info.rate == other.cfg.sample_rates[0][0] == 4800.0
    assert info.nominal_hz == 50.0
    assert info.started == other.start_timestamp.isoformat(timespec="microseconds")
    assert info.channels[1].skew_s == pytest.approx(2.5e-6)
    assert any("secondary values" in note and "IA" in note for note in info.notes)


@pytest.mark.parametrize("kind", ["ASCII", "BINARY", "FLOAT32"])
def test_a_file_in_one_piece_is_read(tmp_path, kind):
    data = dat(kind, 3)
    sort = "ASCII" if kind == "ASCII" else f"BINARY: {len(data)}"
    text = f"--- file type: CFG ---\n{cfg(kind, 2013, 3)}--- file type: INF ---\n\n"
    text += f"--- file type: HDR ---\n\n--- file type: DAT {sort} ---\n"
    path = tmp_path / "x.cff"
    path.write_bytes(text.encode() + data)
    info, blocks = read(path)
    parted = read(pair(tmp_path, cfg(kind, 2013, 3), data))
    assert np.array_equal(values(info, blocks), values(*parted))


@pytest.mark.parametrize(
    "kind, marker", [("BINARY", -(2**15)), ("BINARY32", -(2**31)), ("ASCII", 99999)]
)
def test_a_missing_value_is_a_gap_of_its_set(tmp_path, kind, marker):
    codes = CODES.copy()
    codes[1, 100:103] = marker
    _, blocks = read(pair(tmp_path, cfg(kind), dat(kind, codes=codes)))
    assert [(b.index, b.sets, b.lost_before) for b in blocks] == [(0, 100, 0), (103, N - 103, 3)]


def test_a_float_or_a_field_that_is_missing_is_a_gap(tmp_path):
    codes = CODES.astype(float)
    codes[0, 9] = np.nan
    for kind in ("ASCII", "FLOAT32"):
        _, blocks = read(pair(tmp_path, cfg(kind), dat(kind, codes=codes)))
        assert [(b.index, b.lost_before) for b in blocks] == [(0, 0), (10, 1)]


def test_99999_is_a_value_where_the_channel_reaches_that_far(tmp_path):
    codes = CODES.copy()
    codes[1, 5] = 99999
    wide = f"2,IA,A,bus,A,{GAIN[1]},{OFFSET[1]},0,-999999,999999,400,5,S"
    _, blocks = read(pair(tmp_path, cfg("ASCII", second=wide), dat("ASCII", codes=codes)))
    assert len(blocks) == 1


@pytest.mark.parametrize("kind", ["ASCII", "BINARY"])
def test_a_step_in_the_numbers_is_a_gap(tmp_path, kind):
    numbers = np.arange(1, N + 1)
    numbers[200:] += 31
    _, blocks = read(pair(tmp_path, cfg(kind, sets=N), dat(kind, numbers=numbers)))
    assert [(b.index, b.sets, b.lost_before) for b in blocks] == [(0, 200, 0), (231, N - 200, 31)]


def test_numbers_that_wrap_are_no_gap(tmp_path):
    numbers = np.arange(2**32 - 300, 2**32 - 300 + N) % 2**32
    path = pair(tmp_path, cfg(), b"")
    data = bytearray(dat())
    for k, n in enumerate(numbers.tolist()):
        struct.pack_into("<I", data, 12 * k, n)
    path.with_suffix(".dat").write_bytes(data)
    _, blocks = read(path)
    assert [b.gap_before for b in blocks] == [False]


def test_a_channel_that_never_has_a_value_is_left_out(tmp_path):
    codes = CODES.copy()
    codes[0] = -(2**15)
    info, blocks = read(pair(tmp_path, cfg(), dat(codes=codes)))
    assert [c.name for c in info.channels] == ["IA"]
    assert sum(b.sets for b in blocks) == N
    assert any("Left out" in note and "VA" in note for note in info.notes)


def test_a_multiplier_of_zero_reads_the_offset(tmp_path):
    flat = "1,VA,A,bus,kV,0,2.5,0,-32767,32767,110,0.1,P"
    info, blocks = read(pair(tmp_path, cfg(first=flat), dat()))
    assert np.unique(values(info, blocks)[0]).tolist() == [2500.0]


def test_the_rate_may_be_in_the_times_only(tmp_path):
    info, _ = read(pair(tmp_path, cfg(rates="0\n0,{n}\n"), dat()))
    assert info.rate == pytest.approx(1e6 / 208, rel=1e-6)  # times step by 208 µs
    assert any("from the times" in note for note in info.notes)


def test_a_dat_that_is_named_finds_its_cfg_and_says_so(tmp_path):
    path = pair(tmp_path, cfg(), dat())
    info, _ = read(path.with_suffix(".dat"))
    assert any("x.dat is described by x.cfg" in note for note in info.notes)


@pytest.mark.parametrize("spelled", [".DAT", ".Dat"])
def test_capital_letters_in_the_other_name_do_not_hide_it(tmp_path, spelled):
    path = pair(tmp_path, cfg(), dat())
    path.with_suffix(".dat").rename(path.with_suffix(spelled))
    assert read(path)[0].rate == 4800.0


def test_other_encodings_than_utf8_are_read(tmp_path):
    path = pair(tmp_path, cfg(head="Übergabe,7,1999").encode("latin-1"), dat())
    assert read(path)[0].unit_id == "Übergabe"


@pytest.mark.parametrize("kind", ["ASCII", "BINARY"])
def test_fewer_sets_than_promised_are_read_and_said_to_be_cut(tmp_path, kind):
    path = pair(tmp_path, cfg(kind, sets=10**11), dat(kind))
    recording = ComtradeRecording(path, RecordingOptions())
    sets = 0
    with pytest.raises(RecordingDamaged, match=r"x\.dat is cut short.*100000000000 sets.*hold 700"):
        for block in recording.blocks():
            sets += block.sets
    assert sets == N


def test_more_sets_than_promised_are_all_read_and_said(tmp_path):
    info, blocks = read(pair(tmp_path, cfg(sets=500), dat()))
    assert sum(b.sets for b in blocks) == N
    assert any("promises 500 sets, the data hold 700" in note for note in info.notes)


def test_a_line_that_is_no_set_is_named(tmp_path):
    lines = dat("ASCII").split(b"\r\n")
    lines[400] = b"401,83408,12"
    recording = ComtradeRecording(
        pair(tmp_path, cfg("ASCII"), b"\r\n".join(lines)), RecordingOptions()
    )
    sets = 0
    with pytest.raises(RecordingDamaged, match=r"x\.dat line 401 .*401,83408,12"):
        for block in recording.blocks():
            sets += block.sets
    assert sets == 400


# sentence: (description, what the refusal says)
REFUSED = {
    "nothing behind the station": ("a,b,1999\n", "ends after line 1, before the channel counts"),
    "a year that is none": (cfg(head="a,b,yes"), "line 1, field 3: revision year 'yes'"),
    "counts that do not add up": (cfg(counts="9,2A,0D"), "line 2, field 1: 9 channels are not 2"),
    "a count without its letter": (cfg(counts="2,2,0D"), "line 2, field 2: .*does not read as 4A"),
    "no analogue channel": (cfg(counts="0,0A,0D"), "line 2, field 2: there is no analogue"),
    "a multiplier in words": (cfg(first="1,V,A,b,kV,half,0,0,0,0"), "line 3, field 6: .*'half'"),
    "an endless multiplier": (cfg(first="1,V,A,b,kV,inf,0,0,0,0"), "line 3, field 6: .*'inf'"),
    "too few fields": (cfg(second="2,I,A"), "line 4 .analogue channel. has 3 fields and needs 10"),
    "a comma in a name": (
        cfg(first="1,V,left,A,b,kV,1,0,0,0,0,1,1,P"), "line 3, field 6: .*'kV'"
    ),
    "a rate in words": (cfg(rates="1\nfast,{n}\n"), "line 7, field 1: sample rate 'fast'"),
    "two rates": (cfg(rates="2\n4800,300\n9600,{n}\n"), "changes its .*4800 Hz to set 300"),
    "an unknown type": (cfg("PACKED"), "field 1: the file type PACKED is not one of"),
    "another type than the data": (cfg("BINARY32"), "not laid out as the description says: set 2"),
    "status channels that are not there": (cfg(counts="18,2A,16D", status=0).replace(
        "50\n1\n", "".join(f"{k},D,,,0\n" for k in range(16)) + "50\n1\n"), "not laid out"),
}  # fmt: skip


@pytest.mark.parametrize("sentence", REFUSED)
def test_what_does_not_describe_the_data_is_refused_by_line_and_field(tmp_path, sentence):
    description, said = REFUSED[sentence]
    path = pair(tmp_path, description, dat())
    with pytest.raises(RecordingRefused, match=said) as refusal:
        read(path)
    assert "/x." in str(refusal.value)
    assert refusal.value.__notes__


def test_a_missing_half_is_named(tmp_path):
    path = pair(tmp_path, cfg(), dat())
    path.with_suffix(".dat").unlink()
    with pytest.raises(RecordingRefused, match=r"has no x\.dat beside it"):
        read(path)
    path.with_suffix(".dat").write_bytes(b"")
    with pytest.raises(RecordingRefused, match=r"x\.dat is empty"):
        read(path)
    path.unlink()
    with pytest.raises(RecordingAbsent, match=r"there is no file .*x\.cfg") as absence:
        read(path)
    assert "x.dat" in absence.value.__notes__[0]
