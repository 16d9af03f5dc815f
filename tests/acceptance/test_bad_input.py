"""Bad input: one clear message with what to do, the right exit code, nothing measured lost."""

import os
import struct
import wave

import numpy as np
import pytest

SINE = 100.0 * np.sin(2.0 * np.pi * 50.0 * np.arange(16000) / 8000.0 + 0.4)


def _csv(rows: str, header: str = "time [s],U [V]\n") -> bytes:
    return (header + rows).encode()


def _good_rows(n: int) -> str:
    return "".join(f"{k / 8000.0:.6f},{SINE[k]:.4f}\n" for k in range(n))


def _cut_wav() -> bytes:
    import io

    file = io.BytesIO()
    with wave.open(file, "wb") as out:
        out.setnchannels(1)
        out.setsampwidth(2)
        out.setframerate(8000)
        out.writeframes(np.rint(SINE * 300.0).astype("<i2").tobytes())
    return file.getvalue()[:20000]


def _npz_that_lies() -> bytes:
    import io
    import zipfile

    header = b"{'descr': '<f8', 'fortran_order': False, 'shape': (2, 5000000000), }"
    header += b" " * (117 - len(header)) + b"\n"
    array = b"\x93NUMPY\x01\x00" + struct.pack("<H", len(header)) + header + b"\0" * 64
    file = io.BytesIO()
    with zipfile.ZipFile(file, "w") as out:
        out.writestr("samples.npy", array)
    return file.getvalue()


# sentence: (file name, content, more arguments, exit code, what the message must say)
FILES = {
    "an empty file": ("empty.csv", b"", [], 4, "empty"),
    "an empty table": ("header.csv", b"time [s],U [V]\n", [], 4, "row"),
    "no table at all": ("letter.csv", b"Dear Sir,\nthe rack hums.\n", [], 4, "number"),
    "a binary file with a table's name": ("x.csv", bytes(range(256)) * 40, [], 4, "binary"),
    "a ragged last line": ("cut.csv", _csv(_good_rows(4000) + "0.5,"), [], 4, "4002"),
    "a table without time or rate": ("r.csv", _csv("1\n2\n3\n", "U [V]\n"), [], 4, "--rate"),
    "two readings of a comma": (
        "two.csv",
        _csv("0,0,1,5\n0,1,2,5\n0,2,3,5\n"),
        [],
        4,
        "comma",
    ),
    "one sample": ("one.csv", _csv("0.0,1.0\n"), [], 4, "--rate"),
    "a cut WAV": ("cut.wav", _cut_wav(), [], 4, "promise"),
    "a WAV that is none": ("no.wav", b"RIFF\x10\0\0\0JUNK" + b"\0" * 40, [], 4, "no.wav"),
    "an array whose header lies": ("lie.npz", _npz_that_lies(), [], 4, "lie.npz"),
    "no archive": ("bad.npz", b"PK\x03\x04" + b"\0" * 50, [], 4, "bad.npz"),
    "an unknown file": ("noise.bin", os.urandom(40000), [], 4, "noise.bin"),
    "a description without data": (
        "alone.cfg",
        b"a,1,1999\n1,1A,0D\n1,U,,,V,1,0,0,0,1,1,1,P\n50\n1\n8000,10\n,\n,\nBINARY\n1\n",
        [],
        4,
        "alone.dat",
    ),
    "a broken description": ("bad.cfg", b"a,1,1999\n1,xA,0D\n", [], 4, "line 2"),
    "a scale for no channel": ("ok.wav", _cut_wav(), ["--scale", "ch9=1"], 4, "ch9"),
    "a setup that is none": (
        "ok.csv",
        _csv(_good_rows(4000)),
        ["--setup", "{folder}/bad.toml"],
        2,
        "line 2",
    ),
    "a setup that is not there": (
        "ok.csv",
        _csv(_good_rows(4000)),
        ["--setup", "{folder}/none.toml"],
        2,
        "none.toml",
    ),
}


@pytest.mark.parametrize("sentence", FILES)
def test_a_bad_file_gets_one_clear_message(run, tmp_path, sentence):
    name, content, more, code, said = FILES[sentence]
    path = tmp_path / name
    path.write_bytes(content)
    (tmp_path / "bad.toml").write_text('site = "x"\nlimit = 3\n')
    ran = run("measure", str(path), *(m.format(folder=tmp_path) for m in more))
    assert ran.code == code, (ran.code, ran.err)
    assert said in ran.err
    _is_talk(ran)
    assert "try: " in ran.err


def test_what_was_measured_before_the_damage_stands(run, tmp_path):
    path = tmp_path / "cut.wav"
    path.write_bytes(_cut_wav())
    ran = run("measure", str(path), "--json-lines")
    assert ran.code == 4
    # 9978 samples of 8 kS/s are six whole windows of 0.2 s.
    assert len(ran.records("window")) == 6
    assert ran.records("summary")


def test_bad_cells_are_gaps_and_the_rest_is_measured(run, tmp_path):
    rows = _good_rows(16000).splitlines()
    rows[5000] = rows[5000].split(",")[0] + ",OL"
    path = tmp_path / "ol.csv"
    path.write_text("time [s],U [V]\n" + "\n".join(rows) + "\n")
    ran = run("measure", str(path), "--json-lines")
    assert ran.code == 0, ran.err
    gaps = [r for r in ran.records("event") if r["kind"] == "gap"]
    assert [g["value"] for g in gaps] == [1.0, 1.0]  # it begins and it ends
    assert any("gap" in r["flags"] for r in ran.records("window"))
    assert ran.records("stream")[-1]["lost_samples"] == 1
    for record in ran.records("window"):
        assert record["rms"] == pytest.approx(100.0 / np.sqrt(2.0), rel=1e-5)


QUIET = {
    "zeros": np.zeros(16000),
    "a constant": np.full(16000, 12.5),
    "one sample": np.array([3.0]),
    "noise": np.random.default_rng(5).standard_normal(16000),
    "numbers that are none, here and there": np.where(np.arange(16000) % 5000 == 77, np.nan, SINE),
    "a lone third harmonic": np.sin(2.0 * np.pi * 150.0 * np.arange(16000) / 8000.0),
}


@pytest.mark.parametrize("sentence", QUIET)
def test_a_poor_signal_is_measured_and_marked(run, tmp_path, sentence):
    samples = QUIET[sentence]
    path = tmp_path / "quiet.npz"
    np.savez(path, samples=samples, rate=8000.0, units=["V"])
    ran = run("measure", str(path), "--json-lines")
    assert ran.code == 0, ran.err
    windows = ran.records("window")  # records() refuses NaN and Infinity
    assert windows
    if sentence != "numbers that are none, here and there":
        assert all("unlocked" in r["flags"] and r["lock"] == "unlocked" for r in windows)
        assert all(r["cycles"] is None and r["harmonics_pct"] == [] for r in windows)
        expected = float(np.sqrt(np.mean(samples**2)))
        assert windows[0]["rms"] == pytest.approx(expected, rel=0.06, abs=1e-12)
    else:
        # A stretch of less than a cycle is measured over what there is, and judged by nobody.
        scraps = [r for r in windows if r["lock"] != "locked"]
        assert all("edge" in r["flags"] and r["verdict"] == "unsure" for r in scraps)
        assert len(windows) - len(scraps) >= 8
    _is_talk(ran)


# sentence: (arguments, exit code, what the message must say)
SOURCES = {
    "no such port": (["watch", "/dev/ttyNOWHERE", "--plain"], 3, "/dev/ttyNOWHERE"),
    "no such host": (["watch", "tcp://127.0.0.1:1", "--plain"], 3, "127.0.0.1"),
    "no such file": (["watch", "nothing.wav"], 3, "nothing.wav"),
    "no such recording": (["measure", "nothing.wav"], 3, "nothing.wav"),
    "a folder": (["measure", "/tmp"], 3, "folder"),
    "no such scene": (["watch", "sim:hal"], 2, "hall"),
    "no such fault": (["simulate", "clean", "--faults", "dropp=1"], 2, "drop"),
    "nowhere to serve": (["simulate", "clean", "--on", "moon"], 2, "--on"),
    "no scene": (["simulate"], 2, "--list"),
    "no such option of sim": (["watch", "sim:hall?colour=red"], 2, "colour"),
    "no such command": (["wacth"], 2, "wacth"),
    "a bad length": (["watch", "sim:hall", "--for", "soon"], 2, "soon"),
    "a file that is no serial port": (["watch", "serial:/etc/hostname", "--plain"], 3, "hostname"),
}


@pytest.mark.parametrize("sentence", SOURCES)
def test_a_source_that_cannot_be_had_gets_one_clear_message(run, sentence):
    arguments, code, said = SOURCES[sentence]
    ran = run(*arguments)
    assert ran.code == code, (ran.code, ran.err)
    assert said in ran.err
    assert ran.out == ""
    _is_talk(ran)


def test_a_port_that_another_program_holds_is_said_to_be_busy(run, simulate):
    import fcntl
    import termios

    port = simulate("clean", "--on", "pty")
    held = os.open(port, os.O_RDWR | os.O_NOCTTY)
    try:
        # What pyserial's exclusive mode does: the kernel's TIOCEXCL and an advisory lock.
        fcntl.flock(held, fcntl.LOCK_EX | fcntl.LOCK_NB)
        termios.tcflush(held, termios.TCIFLUSH)
        ran = run("watch", port, "--plain", "--for", "1s")
    finally:
        os.close(held)
    assert ran.code == 3, ran.err
    assert "another program" in ran.err
    _is_talk(ran)


def test_a_stream_that_is_no_samples_is_said_to_be_none(run, tmp_path):
    path = tmp_path / "chatter.txt"
    path.write_bytes(b"".join(b"boot %d ok, all is well here\r\n" % k for k in range(800)))
    ran = run("identify", str(path))
    assert ran.code == 4
    assert "no stream of samples" in ran.err
    _is_talk(ran)


def test_hostile_names_reach_no_terminal(run, tmp_path):
    path = tmp_path / "hostile.npz"
    name = "\x1b[2J\x1b]0;gotcha\x07U"
    np.savez(path, samples=SINE, rate=8000.0, names=[name], units=["V\x1b[31m"])
    for form in ((), ("--windows",), ("--csv",), ("--json-lines",)):
        ran = run("measure", str(path), *form)
        assert ran.code == 0, ran.err
        assert b"\x1b" not in ran.out_bytes + ran.err_bytes
        assert b"\\u001b" not in ran.out_bytes
        assert b"\x07" not in ran.out_bytes


def test_a_reader_that_leaves_the_pipe_ends_it_quietly(tmp_path):
    import subprocess
    import sys
    from pathlib import Path

    path = tmp_path / "long.npz"
    np.savez(path, samples=np.tile(SINE, 40), rate=8000.0, units=["V"])
    command = Path(sys.executable).with_name("crestwatch")
    done = subprocess.run(
        ["bash", "-c", f"{command} measure {path} --json-lines | head -1"],
        capture_output=True,
        timeout=60,
        check=False,
    )
    assert done.returncode == 0
    assert done.stderr == b""


def _is_talk(ran) -> None:
    assert "Traceback" not in ran.err
    assert b"\x1b" not in ran.err_bytes
    if ran.code:
        assert "crestwatch: " in ran.err
