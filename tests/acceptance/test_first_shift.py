"""From a logger's bytes to a verdict: the real command, real ptys and sockets, real files."""

import math
import re
import sys
import wave

import numpy as np
import pytest

# The scene's closed form: a way cut at 62 degrees on 230.4 V (sim.scenes.Hall, first cue).
#   rms/V0 = sqrt(1 - a/pi + sin(2a)/(2 pi)), averaging/V0 = (1 + cos a)/2
_A = math.radians(62.0)
CUT_RMS = 230.4 * math.sqrt(1.0 - _A / math.pi + math.sin(2.0 * _A) / (2.0 * math.pi))
CUT_AVERAGING = 230.4 * (1.0 + math.cos(_A)) / 2.0

WINDOW_FIELDS = [
    "record",
    "channel",
    "start_s",
    "duration_s",
    "cycles",
    "frequency_hz",
    "lock",
    "rms",
    "mean",
    "arv",
    "peak_max",
    "peak_min",
    "peak",
    "crest_factor",
    "form_factor",
    "fundamental",
    "thd_f_pct",
    "harmonics_pct",
    "averaging_reading",
    "averaging_error_pct",
    "averaging_error_u_pct",
    "verdict",
    "meters",
    "firing_angle_deg",
    "u",
    "flags",
]


def test_a_simulated_logger_on_a_pty_is_identified_and_flagged(run, simulate):
    port = simulate("hall", "--on", "pty")
    ran = run("watch", port, "--json-lines", "--for", "2s")
    assert ran.code == 0, ran.err
    source = ran.records("source")[0]
    assert source["format"] == "crestwire"
    assert source["sample_rate_hz"] == pytest.approx(8000.0, rel=1e-3)
    ways = [r for r in ran.records("window") if r["channel"] == "way 7 V"]
    assert len(ways) >= 5
    for record in ways:
        assert list(filter(lambda name: name not in record, WINDOW_FIELDS)) == []
        # One edge a half-cycle falls anywhere within a sample: 125 us of 10 ms at most.
        assert record["rms"] == pytest.approx(CUT_RMS, rel=0.008)
        assert record["averaging_reading"] == pytest.approx(CUT_AVERAGING, rel=0.012)
        assert record["frequency_hz"] == pytest.approx(49.985, abs=0.01)
        assert abs(record["rms"] - CUT_RMS) < 3.0 * record["u"]["rms"]
    assert ways[-1]["verdict"] == "misleads"
    supplies = [r for r in ran.records("window") if r["channel"] == "supply"]
    assert supplies[-1]["verdict"] == "agrees"
    assert any(r["kind"] == "misleads" and r["channel"] == "way 7 V" for r in ran.records("event"))
    stream = ran.records("stream")[-1]
    assert stream["lost_samples"] == 0
    assert stream["bad_frames"] == 0
    assert {r["channel"] for r in ran.records("summary")} == {c["name"] for c in source["channels"]}


def test_a_logger_that_prints_lines_works_the_same_way(run, simulate):
    port = simulate("clean", "--on", "pty", "--wire", "text", "--bits", "10", "--rate", "1600")
    ran = run("watch", port, "--json-lines", "--for", "6s")
    assert ran.code == 0, ran.err
    source = ran.records("source")[0]
    assert source["format"] == "text"
    assert [c["unit"] for c in source["channels"]] == ["counts", "counts"]
    # Delays of a busy machine bound the rate that arrival tells in the first seconds.
    assert source["sample_rate_hz"] == pytest.approx(1600.0, rel=0.01)
    windows = [r for r in ran.records("window") if r["channel"] == "ch1"]
    # 229.6 V on a range of 400 V at 10 bits: 229.6 / 400 * 512 counts.
    assert windows[-1]["rms"] == pytest.approx(229.6 / 400.0 * 512.0, rel=0.003)
    assert windows[-1]["verdict"] == "agrees"
    assert ran.records("stream")[-1]["lost_samples"] is None


def test_a_setup_gives_a_text_logger_volts(run, simulate, tmp_path):
    setup = tmp_path / "panel.toml"
    setup.write_text(
        '[[channel]]\ninput = 1\nname = "mains"\nunit = "V"\ngain = 0.78125\noffset_codes = -512\n'
    )
    port = simulate("clean", "--on", "tcp:0", "--wire", "text", "--bits", "10")
    ran = run("watch", port, "--json-lines", "--for", "3s", "--rate", "2000", "--setup", str(setup))
    assert ran.code == 0, ran.err
    mains = [r for r in ran.records("window") if r["channel"] == "mains"]
    assert mains[-1]["rms"] == pytest.approx(229.6, rel=0.003)  # 400 V / 512 codes = 0.78125
    assert ran.records("source")[0]["channels"][0] == {
        "name": "mains",
        "unit": "V",
        "kind": "voltage",
    }


def test_plain_comes_by_itself_in_a_pipe_and_carries_no_control_bytes(run):
    ran = run("watch", "sim:workshop", "--for", "1s")
    assert ran.code == 0
    assert "true RMS" in ran.out
    assert "averaging meter" in ran.out
    assert not any(b < 32 and b != 10 for b in ran.out_bytes)
    assert "proof of dead" in ran.err  # the cautions stand on stderr


def test_a_lost_byte_is_counted_and_told(run):
    ran = run("watch", "sim:clean?faults=drop=2e-5", "--json-lines", "--for", "4s")
    assert ran.code == 0, ran.err
    stream = ran.records("stream")[-1]
    assert stream["bad_frames"] > 0
    assert stream["lost_samples"] % 64 == 0  # whole frames of 64 sets
    assert stream["lost_samples"] > 0
    gaps = [r for r in ran.records("event") if r["kind"] == "gap"]
    assert gaps
    assert any("gap" in r["flags"] for r in ran.records("window"))


@pytest.fixture
def cut_wave():
    """A phase-cut and a plain wave, 4 s at 8 kS/s, true scale known."""
    t = np.arange(32000) / 8000.0
    phase = 2.0 * np.pi * 50.0 * t + 0.3
    cut = np.where(np.mod(phase, np.pi) >= np.pi / 2.0, np.sin(phase), 0.0)
    return np.stack((100.0 * np.sin(phase), 10.0 * cut))


def _write(kind, path, samples):
    if kind == "npz":
        np.savez(path, samples=samples, rate=8000.0, names=["U", "I"], units=["V", "A"])
    elif kind == "csv":
        table = np.column_stack((np.arange(samples.shape[1]) / 8000.0, samples.T))
        np.savetxt(path, table, delimiter=",", header="time [s],U [V],I [A]", comments="")
    elif kind == "wav":
        codes = np.rint(samples / np.array([[200.0], [20.0]]) * 32768.0).astype("<i2")
        with wave.open(str(path), "wb") as out:
            out.setnchannels(2)
            out.setsampwidth(2)
            out.setframerate(8000)
            out.writeframes(np.ascontiguousarray(codes.T).tobytes())
    else:
        _write_comtrade(path, samples)


def _write_comtrade(path, samples):
    """IEEE C37.111-1999 BINARY, fields written by hand."""
    scale = np.array([[200.0], [20.0]]) / 32767.0
    codes = np.rint(samples / scale).astype("<i2")
    n = samples.shape[1]
    path.write_text(
        "bench,1,1999\n2,2A,0D\n"
        f"1,U,,,V,{float(scale[0, 0])!r},0,0,-32767,32767,1,1,P\n"
        f"2,I,,,A,{float(scale[1, 0])!r},0,0,-32767,32767,1,1,P\n"
        f"50\n1\n8000,{n}\n01/12/2026,12:00:00.000000\n01/12/2026,12:00:00.000000\nBINARY\n1\n"
    )
    rows = np.zeros(n, [("n", "<u4"), ("t", "<u4"), ("x", "<i2", (2,))])
    rows["n"] = np.arange(1, n + 1)
    rows["t"] = np.arange(n) * 125
    rows["x"] = codes.T
    path.with_suffix(".dat").write_bytes(rows.tobytes())


@pytest.mark.parametrize("kind", ["csv", "wav", "npz", "cfg"])
def test_every_kind_of_recording_gives_the_same_numbers(run, tmp_path, cut_wave, kind):
    path = tmp_path / f"wave.{kind}"
    _write(kind, path, cut_wave)
    extra = ["--scale", "ch1=200", "--scale", "ch2=20"] if kind == "wav" else []
    ran = run("measure", str(path), "--json-lines", *extra)
    assert ran.code == 0, ran.err
    windows = ran.records("window")
    first = [r for r in windows if r["channel"] in ("U", "ch1")][3]
    second = [r for r in windows if r["channel"] in ("I", "ch2")][3]
    # Closed forms: sine 1/sqrt 2; cut at 90 degrees 1/2, averaging 0.35355 of the peak. The edge
    # falls between two samples of 160 a cycle: 0.5 % of the RMS at most.
    assert first["rms"] == pytest.approx(100.0 / math.sqrt(2.0), rel=6e-5)
    assert second["rms"] == pytest.approx(5.0, rel=0.008)
    assert second["averaging_error_pct"] == pytest.approx(-29.29, abs=0.6)
    assert second["verdict"] == "misleads"
    assert first["verdict"] == "agrees"
    assert second["firing_angle_deg"] == pytest.approx(90.0, abs=1.2)
    assert first["firing_angle_deg"] is None
    assert first["cycles"] == 10


def test_live_and_offline_give_the_same_numbers(run, tmp_path, cut_wave):
    path = tmp_path / "wave.npz"
    _write("npz", path, cut_wave)
    live = run("watch", str(path), "--json-lines", "--speed", "50").records("window")
    offline = run("measure", str(path), "--json-lines").records("window")
    assert len(live) == len(offline) > 30
    for a, b in zip(live, offline, strict=True):
        assert a["rms"] == pytest.approx(b["rms"], rel=1e-8)
        assert a["start_s"] == pytest.approx(b["start_s"], abs=1e-8)
        assert a["verdict"] == b["verdict"]


def test_csv_rows_hold_the_records_numbers(run, tmp_path, cut_wave):
    import csv
    import io

    path = tmp_path / "wave.npz"
    _write("npz", path, cut_wave)
    rows = list(csv.DictReader(io.StringIO(run("measure", str(path), "--csv").out)))
    records = run("measure", str(path), "--json-lines").records("window")
    assert len(rows) == len(records)
    for row, record in zip(rows, records, strict=True):
        assert float(row["rms"]) == record["rms"]
        assert row["verdict"] == record["verdict"]
        assert row["channel"] == record["channel"]


def test_a_recording_shorter_than_a_window_is_measured_over_its_whole_cycles(run, tmp_path):
    t = np.arange(800) / 8000.0  # five cycles of 50 Hz
    path = tmp_path / "short.npz"
    np.savez(path, samples=np.sin(2.0 * np.pi * 50.0 * t + 1.0), rate=8000.0, units=["V"])
    records = run("measure", str(path), "--json-lines").records("window")
    assert len(records) == 1
    assert "edge" in records[0]["flags"]
    assert records[0]["cycles"] in (3, 4)
    assert records[0]["rms"] == pytest.approx(math.sqrt(0.5), rel=1e-5)


@pytest.mark.parametrize("shell", ["bash", "zsh", "tcsh"])
def test_completion_names_every_command(run, shell):
    script = run("completion", shell).out
    for command in ("watch", "measure", "simulate", "identify", "ports"):
        assert command in script


@pytest.mark.parametrize("encoding", ["ascii", "latin-1"])
def test_an_old_encoding_is_no_exception(run, tmp_path, cut_wave, encoding):
    path = tmp_path / "wave.npz"
    np.savez(path, samples=cut_wave, rate=8000.0, names=["Büro", "Ω"], units=["V", "A"])
    for form in ((), ("--windows",)):
        ran = run("measure", str(path), *form, PYTHONIOENCODING=encoding)
        assert ran.code == 0
        assert ran.err == ""
    ran = run("measure", str(path), "--json-lines", PYTHONIOENCODING=encoding)
    assert ran.records("source")[0]["channels"][0]["name"] == "Büro"  # records are UTF-8, always


def test_a_file_in_counts_is_said_to_be(run, tmp_path, cut_wave):
    path = tmp_path / "wave.wav"
    _write("wav", path, cut_wave)
    assert "All channels are in counts" in run("measure", str(path)).err
    assert run("measure", str(path), "--scale", "ch1=200V", "--scale", "ch2=20A").err == ""


@pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
def test_the_table_fits_a_terminal_of_80_columns(tmp_path, cut_wave):
    import fcntl
    import os
    import pty
    import struct
    import subprocess
    import termios
    from pathlib import Path

    path = tmp_path / "w.npz"
    _write("npz", path, cut_wave)
    master, slave = pty.openpty()
    fcntl.ioctl(slave, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 80, 0, 0))
    command = str(Path(sys.executable).with_name("crestwatch"))
    environment = {k: v for k, v in os.environ.items() if k not in ("COLUMNS", "LINES")}
    subprocess.run(
        [command, "measure", str(path.name)],
        stdin=slave, stdout=slave, stderr=slave, cwd=tmp_path, check=True, timeout=60,
        env={**environment, "NO_COLOR": "1", "TERM": "xterm"},
    )  # fmt: skip
    os.close(slave)
    shown = os.read(master, 65536).decode()
    os.close(master)
    bare = re.sub(r"\x1b\[[0-9;]*m", "", shown)
    header = next(line for line in bare.splitlines() if "true RMS" in line)
    assert "misled" in header  # one line holds them all
    assert len(header.rstrip()) <= 80
