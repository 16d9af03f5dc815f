"""What kind a file is, captures of a logger's bytes, and that no input ends in a traceback."""

import io
import os
import struct
import wave
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from acquisition.errors import AcquisitionError, NotSamples, RecordingAbsent, RecordingRefused
from acquisition.recordings.open import open_recording
from acquisition.recordings.recording import RecordingOptions
from acquisition.wire.crestwire_encode import encode_data, encode_hello
from acquisition.wire.crestwire_frame import Hello
from acquisition.wire.raw import encode_raw
from acquisition.wire.text import encode_text

N = 4000
CODES = np.stack(
    [
        np.rint(2048 + 1500 * np.sin(2 * np.pi * 50 * np.arange(N) / 8000)),
        np.rint(1990 + 700 * np.sin(2 * np.pi * 50 * np.arange(N) / 8000 - 0.6)),
    ]
).astype(np.uint16)
PLAIN = RecordingOptions()


def read(path, options=PLAIN):
    recording = open_recording(path, options)
    blocks = list(recording.blocks())
    recording.close()
    return recording.info, blocks, np.concatenate([b.codes for b in blocks], axis=1)


def frames(drop=(), rate_mhz=8_000_000):
    out = [
        encode_hello(
            Hello(rate_mhz=rate_mhz, tick_hz=1_000_000),
            boot=3, sequence=0, index=0, tick=0, channels=2,
        )
    ]  # fmt: skip
    for k in range(0, N, 100):
        if k // 100 not in drop:
            out.append(
                encode_data(
                    CODES[:, k : k + 100], boot=3, sequence=1 + k // 100, index=k, tick=k * 125
                )
            )
    return b"".join(out)


# -- captures ------------------------------------------------------------------------------------


def test_captured_frames_tell_their_rate_and_their_loss(tmp_path):
    path = tmp_path / "evening.bin"
    path.write_bytes(frames(drop=(7, 8, 20)))
    info, blocks, codes = read(path)
    assert (info.format, info.rate) == ("crestwire", 8000.0)
    kept = [k for k in range(N) if k // 100 not in (7, 8, 20)]
    assert np.array_equal(codes, CODES[:, kept])
    assert [(b.index, b.lost_before) for b in blocks if b.gap_before] == [(900, 200), (2100, 100)]


def test_captured_lines_need_a_rate(tmp_path):
    path = tmp_path / "evening.log"
    path.write_bytes(encode_text(CODES))
    with pytest.raises(RecordingRefused, match=r"evening\.log holds a text stream") as refusal:
        open_recording(path, PLAIN)
    assert "--rate" in refusal.value.__notes__[0]
    info, blocks, codes = read(path, RecordingOptions(rate=8000.0))
    assert info.rate == 8000.0
    # The first line of a capture may be a part of one, so a decoder may leave it out.
    assert np.array_equal(codes, CODES[:, N - codes.shape[1] :])
    assert codes.shape[1] >= N - 1
    assert all(b.lost_before in (0, None) for b in blocks)


def test_captured_words_are_read_as_told(tmp_path):
    path = tmp_path / "evening.raw"
    path.write_bytes(encode_raw(CODES, sample_type="u16", byte_order="big"))
    _, _, codes = read(path, RecordingOptions(rate=8000.0, format="raw:u16:2:big"))
    assert np.array_equal(codes, CODES)


def test_a_capture_may_have_any_name_when_its_format_is_told(tmp_path):
    path = tmp_path / "evening.csv"
    path.write_bytes(frames())
    assert read(path, RecordingOptions(format="crestwire"))[2].shape == (2, N)


def test_bytes_that_are_no_samples_are_refused_with_how_they_begin(tmp_path):
    path = tmp_path / "letter"
    path.write_bytes(b"Dear colleague,\nplease find nothing here.\n" * 300)
    with pytest.raises(RecordingRefused, match="begins with the text 'Dear colleague,'") as refusal:
        open_recording(path, PLAIN)
    assert any("--format" in note for note in refusal.value.__notes__)
    path.write_bytes(np.random.default_rng(1).bytes(200_000))
    with pytest.raises(RecordingRefused, match=r"letter.*begins with the bytes ([0-9a-f]{2} ){7}"):
        open_recording(path, RecordingOptions(rate=8000.0))


def test_a_format_that_is_none_is_refused(tmp_path):
    path = tmp_path / "x"
    path.write_bytes(frames())
    for wrong in ("morse", "raw:u99:2", "raw:u16:two"):
        with pytest.raises((RecordingRefused, NotSamples), match=wrong):
            open_recording(path, RecordingOptions(rate=1.0, format=wrong))


# -- kinds ---------------------------------------------------------------------------------------

# sentence: (name, content, what the refusal says, what the advice says)
OTHER = {
    "a spreadsheet": ("x.xlsx", b"PK\x03\x04" + bytes(60), "spreadsheet", "CSV"),
    "an old spreadsheet": ("x.csv", b"\xd0\xcf\x11\xe0" + bytes(60), "spreadsheet", "CSV"),
    "something compressed": ("x.csv.gz", b"\x1f\x8b\x08" + bytes(60), "gzip", "unpack"),
    "a database": ("x.db", b"SQLite format 3\0" + bytes(60), "database", "logbook"),
    "a picture": ("x.png", b"\x89PNG\r\n" + bytes(60), "picture", "recording itself"),
    "binary named as a table": ("x.csv", bytes(range(256)), "holds binary data", "--format"),
    "a table named as an array": ("x.npz", b"a,b\n1,2\n", "named as NPZ", "right name"),
    "nothing": ("x.wav", b"", "is empty", "finished"),
}


@pytest.mark.parametrize("sentence", OTHER)
def test_other_kinds_of_file_are_told_apart(tmp_path, sentence):
    name, content, said, advice = OTHER[sentence]
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(RecordingRefused, match=said) as refusal:
        open_recording(path, PLAIN)
    assert name in str(refusal.value)
    assert any(advice in note for note in refusal.value.__notes__)


def test_full_scale_is_only_for_sound(tmp_path):
    path = tmp_path / "x.csv"
    path.write_bytes(b"time [s],U [V]\n0,1\n0.1,2\n")
    with pytest.raises(RecordingRefused, match="--scale is for WAV and FLAC"):
        open_recording(path, RecordingOptions(scale={"U": 1.0}))


def test_what_is_not_there_or_no_file_is_absent(tmp_path):
    (tmp_path / "evening.csv").write_text("x")
    with pytest.raises(RecordingAbsent, match=r"there is no file .*evening\.wav") as absence:
        open_recording(tmp_path / "evening.wav", PLAIN)
    assert "evening.csv" in absence.value.__notes__[0]
    with pytest.raises(RecordingAbsent, match="is a folder"):
        open_recording(tmp_path, PLAIN)
    with pytest.raises(RecordingAbsent, match="there is no file"):
        open_recording(tmp_path / "evening.csv" / "x", PLAIN)
    with pytest.raises(RecordingAbsent):
        open_recording(Path("a\0b"), PLAIN)
    with pytest.raises(RecordingAbsent):
        open_recording(tmp_path / ("x" * 5000), PLAIN)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="pipes with names are POSIX")
def test_a_pipe_is_refused_and_does_not_hang(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(RecordingRefused, match="no ordinary file"):
        open_recording(tmp_path / "pipe", PLAIN)


def test_a_file_that_may_not_be_read_says_so(tmp_path, monkeypatch):
    path = tmp_path / "x.csv"
    path.write_text("time [s],U [V]\n0,1\n")

    def forbidden(*_args, **_kwargs):  # root may read everything, so the refusal is played
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "open", forbidden)
    with pytest.raises(RecordingAbsent, match=r"x\.csv may not be read") as absence:
        open_recording(path, PLAIN)
    assert "chmod" in absence.value.__notes__[0]


# -- hurt files ----------------------------------------------------------------------------------


def _wav():
    file = io.BytesIO()
    with wave.open(file, "wb") as out:
        out.setparams((2, 2, 8000, 0, "NONE", ""))
        out.writeframes(CODES.T[:300].astype("<i2").tobytes())
    return file.getvalue()


def _npz():
    file = io.BytesIO()
    np.savez(file, samples=CODES[:, :300], rate=8000.0, names=["U", "I"])
    return file.getvalue()


_TABLE = "time [s],U [V],I [A]\n" + "".join(
    f"{k / 8000:.6f},{u},{i}\n" for k, (u, i) in enumerate(CODES.T[:300].tolist())
)
_CFG = (
    "x,1,1999\n2,2A,0D\n1,U,,,V,1,0,0,-9,9,1,1,P\n2,I,,,A,1,0,0,-9,9,1,1,P\n50\n1\n8000,300\n"
    "01/02/2030,00:00:00.0\n01/02/2030,00:00:00.0\n{}\n1\n"
)
_ASCII = "".join(f"{k + 1},{k * 125},{u},{i}\n" for k, (u, i) in enumerate(CODES.T[:300].tolist()))
_BINARY = b"".join(
    struct.pack("<IIhh", k + 1, k * 125, u, i) for k, (u, i) in enumerate(CODES.T[:300].tolist())
)
# name: (content, what stands beside it)
WHOLE = {
    "x.csv": (_TABLE.encode(), None),
    "comma.csv": (_TABLE.replace(",", ";").replace(".", ",").encode(), None),
    "x.wav": (_wav(), None),
    "x.npz": (_npz(), None),
    "x.cfg": (_CFG.format("BINARY").encode(), ("x.dat", _BINARY)),
    "x.dat": (_BINARY, ("x.cfg", _CFG.format("BINARY").encode())),
    "a.dat": (_ASCII.encode(), ("a.cfg", _CFG.format("ASCII").encode())),
    "x.bin": (frames()[:9000], None),
}
wounds = st.lists(
    st.tuples(
        st.floats(0, 1),
        st.sampled_from(["flip", "set", "cut", "drop", "double"]),
        st.binary(max_size=9),
    ),
    min_size=1,
    max_size=4,
)


def hurt(content, wounds):
    for where, how, value in wounds:
        at = int(where * (len(content) - 1)) if content else 0
        if how == "flip":
            content = (
                content[:at] + bytes([content[at] ^ 0x55] if content else []) + content[at + 1 :]
            )
        elif how == "set":
            content = content[:at] + value + content[at + len(value) :]
        elif how == "cut":
            content = content[:at]
        elif how == "drop":
            content = content[:at] + content[at + 1 + len(value) :]
        else:
            content = content[:at] + content[max(0, at - 50) :]
    return content


@pytest.mark.slow
@pytest.mark.parametrize("name", WHOLE)
@settings(
    deadline=None, max_examples=120, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(wounds)
def test_a_hurt_file_gives_finite_samples_or_one_sentence(tmp_path, name, wounds):
    content, other = WHOLE[name]
    path = tmp_path / name
    path.write_bytes(hurt(content, wounds))
    if other is not None:
        (tmp_path / other[0]).write_bytes(other[1])
    index = 0
    try:
        recording = open_recording(path, RecordingOptions())
        assert recording.info.rate > 0
        for block in recording.blocks():
            assert block.index >= index
            assert block.gap_before == (block.index > index or block.lost_before is None)
            index = block.index + block.sets
            assert np.isfinite(block.codes).all()
            assert block.codes.shape[0] == len(recording.info.channels)
            assert not block.codes.flags.writeable
    except AcquisitionError as error:
        assert str(error).isprintable()
        assert len(str(error)) < 600


@pytest.mark.parametrize("name", WHOLE)
def test_a_whole_file_is_read_whole(tmp_path, name):
    content, other = WHOLE[name]
    (tmp_path / name).write_bytes(content)
    if other is not None:
        (tmp_path / other[0]).write_bytes(other[1])
    _, blocks, codes = read(tmp_path / name)
    assert np.array_equal(codes, CODES[:, : codes.shape[1]])
    assert codes.shape[1] >= 300
    assert not any(b.gap_before for b in blocks)
