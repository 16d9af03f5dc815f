"""Links and far ends over real pseudo-terminals and sockets, and how each refusal is told."""

import errno
import os
import pty
import socket
import subprocess
import sys
import threading
import time
import tty
from contextlib import closing, suppress
from pathlib import Path

import numpy as np
import pytest
import serial

from acquisition.errors import (
    LinkAbsent,
    LinkBusy,
    LinkClosed,
    LinkForbidden,
    LinkLost,
    LinkUnusable,
)
from acquisition.links import serial_port
from acquisition.links.far_end import PtyEnd, TcpEnd, serve
from acquisition.links.ports import find_ports
from acquisition.links.serial_port import SerialDevice, SerialLink, SerialOpener, find_again
from acquisition.links.tcp import TcpLink
from acquisition.reader import Reader
from acquisition.wire.crestwire import CrestwireDecoder
from acquisition.wire.crestwire_encode import encode_data


@pytest.fixture
def port():
    """A pty: our end, and the path of the other."""
    master, slave = pty.openpty()
    tty.setraw(slave)
    path = os.ttyname(slave)
    os.close(slave)
    yield master, path
    with suppress(OSError):
        os.close(master)


def collect(link, size, patience=5.0):
    data, end = b"", time.monotonic() + patience
    while len(data) < size and time.monotonic() < end:
        data += link.read()
    return data


def test_serial_reads_every_byte_value_and_drains_the_queue(port):
    master, path = port
    with closing(SerialLink(path)) as link:
        sent = bytes(range(256)) * 40
        writer = threading.Thread(
            target=lambda: [os.write(master, sent[k : k + 512]) for k in range(0, len(sent), 512)]
        )
        writer.start()
        assert collect(link, len(sent)) == sent
        writer.join()
        assert link.read() == b""


def test_serial_absent():
    with pytest.raises(LinkAbsent, match="there is no port /dev/ttyNONE") as caught:
        SerialLink("/dev/ttyNONE")
    assert "plug the logger in" in caught.value.__notes__[0]


def test_serial_busy(port):
    _, path = port
    with closing(SerialLink(path)), pytest.raises(LinkBusy, match="held by another program"):
        SerialLink(path)


def test_serial_not_a_serial_port(tmp_path):
    plain = tmp_path / "plain"
    plain.write_text("no port")
    for wrong in (plain, tmp_path, Path("/dev/null")):
        with pytest.raises(LinkUnusable, match="is not a serial port"):
            SerialLink(str(wrong))


@pytest.mark.parametrize("baud", [-1, 0, 10**12])
def test_serial_refused_baud(port, baud):
    try:
        SerialLink(port[1], baud).close()
    except LinkUnusable as error:
        assert "baud" in str(error)


# How pyserial 3.5 reports each cause (read in its source) -> what it becomes.
REPORTED = [
    (serial.SerialException(errno.ENOENT, "no such file"), LinkAbsent),
    (serial.SerialException(errno.EACCES, "permission denied"), LinkForbidden),
    (serial.SerialException(errno.EAGAIN, "could not lock"), LinkBusy),
    (serial.SerialException(errno.EBUSY, "busy"), LinkBusy),
    (serial.SerialException("could not open port 'COM9': FileNotFoundError(2, …)"), LinkAbsent),
    (serial.SerialException("could not open port 'COM9': PermissionError(13, …)"), LinkBusy),
    (serial.SerialException("Could not configure port: (25, …)"), LinkUnusable),
    (ValueError("Failed to set custom baud rate (123)"), LinkUnusable),
]


@pytest.mark.parametrize(("reported", "expected"), REPORTED)
def test_each_refusal_is_told_apart(monkeypatch, reported, expected):
    def refuse(self):
        raise reported

    monkeypatch.setattr(serial.Serial, "open", refuse)
    with pytest.raises(expected):
        SerialLink("COM9")


def test_forbidden_names_the_group(monkeypatch, tmp_path):
    import grp

    device = tmp_path / "ttyX"
    device.touch(0o660)
    group = next((g for g in grp.getgrall() if g.gr_name == "dialout"), None)
    if group is None or os.getuid() != 0:
        pytest.skip("needs root and a group dialout to make such a device")
    os.chown(device, 0, group.gr_gid)

    def refuse(self):
        raise serial.SerialException(errno.EACCES, "permission denied")

    monkeypatch.setattr(serial.Serial, "open", refuse)
    with pytest.raises(LinkForbidden) as caught:
        SerialLink(str(device))
    assert "join the group dialout" in caught.value.__notes__[0]


@pytest.mark.skipif(os.getuid() != 0, reason="only root may become another user")
def test_forbidden_to_a_real_other_user(port):
    _, path = port
    os.chmod(path, 0o600)  # noqa: PTH101 - a device, not a file of ours
    # In a process of its own, which gives up root and then tries.
    code = (
        "import os, sys; from acquisition.links.serial_port import SerialLink;"
        "from acquisition.errors import LinkForbidden; import serial;"
        "os.setgroups([]); os.setgid(65534); os.setuid(65534)\n"
        f"try: SerialLink({path!r})\n"
        "except LinkForbidden as e: sys.exit(42)\n"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 42


def test_serial_unplugged_while_reading(port):
    master, path = port
    with closing(SerialLink(path)) as link:
        os.write(master, b"last words")
        assert collect(link, 10) == b"last words"
        os.close(master)
        with pytest.raises(LinkLost, match="unplugged or reset"):
            for _ in range(3):
                link.read()


def test_serial_closed_from_another_thread_while_reading(port):
    _, path = port
    link = SerialLink(path)
    raised = []

    def read_on():
        try:
            while True:
                link.read()
        except Exception as error:
            raised.append(error)

    thread = threading.Thread(target=read_on)
    thread.start()
    link.close()
    thread.join(5.0)
    assert [type(e) for e in raised] == [LinkClosed]
    assert not link._port.is_open
    link.close()


def device(name, number="", where="1-1"):
    return SerialDevice(name, "board", 0x1234, 0x5678, number, where, "", "")


def test_a_renamed_port_is_found_by_its_serial_number():
    known = device("/dev/ttyACM0", "77")
    others = [device("/dev/ttyACM0", "78"), device("/dev/ttyACM3", "77", "2-4")]
    assert find_again(known, others) == "/dev/ttyACM3"
    assert find_again(known, others[:1]) is None


def test_two_identical_loggers_are_told_apart_by_place_or_not_at_all():
    known = device("/dev/ttyACM0")
    two = [device("/dev/ttyACM1"), device("/dev/ttyACM2", where="1-2")]
    assert find_again(known, two) == "/dev/ttyACM1"
    with pytest.raises(LinkAbsent, match="may be any of"):
        find_again(known, [device("/dev/ttyACM1"), device("/dev/ttyACM2")])


def test_opener_follows_the_identity(monkeypatch, port):
    _, path = port
    monkeypatch.setattr(serial_port, "devices", lambda: [device(path, "77")])
    opener = SerialOpener(path)
    opener().close()
    monkeypatch.setattr(serial_port, "devices", lambda: [device("/dev/ttyNONE", "77")])
    with pytest.raises(LinkAbsent, match="/dev/ttyNONE"):
        opener()


def test_ports_are_listed_with_what_to_do(monkeypatch):
    found = [
        SerialDevice("/dev/ttyS0", "n/a", None, None, "", "", "", ""),
        SerialDevice("/dev/ttyNONE", "x", 0x2341, 0x43, "7\x1b[2J5", "1-1", "Some", "Board"),
    ]
    monkeypatch.setattr("acquisition.links.ports.devices", lambda: found)
    first, second = find_ports()
    assert (first.device, first.likely, first.readable) == ("/dev/ttyNONE", True, False)
    assert first.identity == "2341:0043 serial 7 [2J5"
    assert "there is no port" in first.problem
    assert second.identity == ""


def test_ports_of_this_machine_can_be_listed():
    assert all(port.device for port in find_ports())


# TCP


def test_tcp_reads_and_tells_the_end():
    with closing(TcpEnd()) as end:
        host, number = end.address.removeprefix("tcp://").split(":")
        with closing(TcpLink(host, int(number))) as link:
            assert link.read() == b""
            assert end.heard
            sent = bytes(range(256)) * 100
            assert end.write(sent) == len(sent)
            assert collect(link, len(sent)) == sent
            end.unplug()
            with pytest.raises(LinkLost, match="closed the connection"):
                link.read()


def free_port():
    with closing(socket.socket()) as s:
        s.bind(("127.0.0.1", 0))
        return s.getsockname()[1]


def test_tcp_refusals():
    with pytest.raises(LinkAbsent, match="nobody listens"):
        TcpLink("127.0.0.1", free_port())
    with pytest.raises(LinkAbsent, match="there is no host"):
        TcpLink("no-such-host.invalid", 1)
    with pytest.raises(LinkUnusable):
        TcpLink("127.0.0.1", 70000)


def test_tcp_reset_is_a_loss():
    with (
        closing(socket.create_server(("127.0.0.1", 0))) as server,
        closing(TcpLink("127.0.0.1", server.getsockname()[1])) as link,
    ):
        peer, _ = server.accept()
        peer.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, b"\1\0\0\0\0\0\0\0")
        peer.close()
        with pytest.raises(LinkLost):
            link.read()


def test_tcp_closed_by_us():
    with closing(TcpEnd()) as end:
        link = TcpLink("127.0.0.1", int(end.address.rsplit(":", 1)[1]))
        link.close()
        with pytest.raises(LinkClosed):
            link.read()


def test_tcp_port_in_use():
    with closing(TcpEnd()) as end, pytest.raises(LinkBusy, match="held by another program"):
        TcpEnd(int(end.address.rsplit(":", 1)[1]))
    with pytest.raises(LinkUnusable):
        TcpEnd(99999)


# Far ends


def logger_pieces(count, sets=64):
    for k in range(count):
        codes = np.stack([(k * sets + np.arange(sets)) % 4096] * 2)
        index = k * sets
        yield k * 0.002, encode_data(codes, boot=1, sequence=k, index=index, tick=index * 125)


@pytest.mark.parametrize("kind", ["pty", "tcp"])
def test_served_in_real_time_and_read_without_loss(kind):
    with closing(PtyEnd() if kind == "pty" else TcpEnd()) as end:
        if kind == "pty":
            opener = lambda: SerialLink(end.address)  # noqa: E731
        else:
            opener = lambda: TcpLink("127.0.0.1", int(end.address.rsplit(":", 1)[1]))  # noqa: E731
        reader = Reader(opener, CrestwireDecoder(), reconnect=True)
        reader.start()
        try:
            wait_until(lambda: end.heard)
            began = time.monotonic()
            served = serve(logger_pieces(300), end)
            took = time.monotonic() - began
            assert (served.pieces, served.unheard, served.discarded) == (300, 0, 0)
            assert took >= 0.59
            wait_until(lambda: reader.status.tally.received == 300 * 64)
            assert reader.status.tally.lost == 0
        finally:
            reader.stop()


def wait_until(true, patience=5.0):
    end = time.monotonic() + patience
    while not true():
        assert time.monotonic() < end, "it did not come to pass"
        time.sleep(0.002)


def test_nobody_there_means_nobody_hears():
    with closing(PtyEnd()) as end:
        assert not end.heard
        served = serve([(0.0, b"abc"), (0.001, b"def")], end)
        assert (served.unheard, served.bytes_sent) == (2, 0)


def test_a_full_fifo_discards_and_tells(port):
    with closing(PtyEnd()) as end, closing(SerialLink(end.address)):
        told = []
        pieces = [(0.0, bytes(2000)) for _ in range(100)]
        served = serve(pieces, end, fifo_bytes=8000, on_discard=told.append, until=lambda: False)
        assert served.discarded == len(told) > 0
        assert served.pieces == 100


def test_a_link_name_survives_a_replug(tmp_path):
    name = tmp_path / "logger"
    with closing(PtyEnd(name)) as end:
        with closing(SerialLink(str(name))) as link:
            assert end.heard
            end.unplug()
            with pytest.raises(LinkLost):
                for _ in range(3):
                    link.read()
        end.replug()
        with closing(SerialLink(str(name))) as link:
            end.write(b"back")
            assert collect(link, 4) == b"back"
    assert not name.exists()
    name.write_text("mine")
    with pytest.raises(LinkUnusable, match="is there already"):
        PtyEnd(name)
    assert name.read_text() == "mine"


def open_descriptors():
    return len(os.listdir("/proc/self/fd"))  # noqa: PTH208


@pytest.mark.skipif(not Path("/proc/self/fd").exists(), reason="counts descriptors in /proc")
def test_unplug_and_replug_keeps_the_account_and_leaks_nothing(tmp_path):
    """12 rounds here; the bench does 1000."""
    name = tmp_path / "logger"
    pieces = [piece for _, piece in logger_pieces(4000)]
    before = open_descriptors(), threading.active_count()
    with closing(PtyEnd(name)) as end:
        reader = Reader(
            SerialOpener(str(name)), CrestwireDecoder(), wait=lambda s: time.sleep(0.001)
        )
        reader.start()
        sent = 0
        for k in range(12):
            # Opening empties the input, so nothing is sent before the reader says that it reads.
            wait_until(lambda k=k: reader.status.tally.reconnects == k and end.heard)
            received = reader.status.bytes_received
            end.write(b"".join(pieces[sent : sent + 3]) + pieces[sent + 3][:20])
            wait_until(lambda g=received: reader.status.bytes_received > g)
            sent += 5
            end.unplug()
            end.replug()
        wait_until(lambda: reader.status.tally.reconnects == 12)
        end.write(pieces[sent])
        wait_until(
            lambda: (
                reader.status.tally.received + (reader.status.tally.lost or 0) == (sent + 1) * 64
            )
        )
        reader.stop()
        assert reader.status.tally.reconnects == 12
        assert reader.status.tally.reboots == 0
    assert (open_descriptors(), threading.active_count()) == before
