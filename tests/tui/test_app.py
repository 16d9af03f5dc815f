"""The app: keys, freezing, sizes, and a real terminal."""

import os
import random
import re
import sys
import time
from pathlib import Path

import pyte
import pytest

from tui.app import CrestwatchApp
from tui.lines import plain
from tui.settings import Settings, _glyphs_of_terminal


def _text(app: CrestwatchApp) -> str:
    return plain(app._canvas._lines)


def _drive(test, size=(80, 24)):
    import asyncio

    def run(app):
        async def go():
            async with app.run_test(size=size) as pilot:
                await pilot.pause(0.15)
                await test(app, pilot)

        asyncio.run(go())

    return run


def test_cautions_come_first_and_enter_goes_on(snapshot):
    shown = snapshot(2)
    app = CrestwatchApp(lambda: shown, settings=Settings(), cautions=("Mind", "Do not touch."))

    async def test(app, pilot):
        assert "Do not touch." in _text(app)
        await pilot.press("2")
        assert "Do not touch." in _text(app)  # read first
        await pilot.press("enter")
        assert "averaging meter would show" in _text(app)
        await pilot.press("c")
        assert "Do not touch." in _text(app)

    _drive(test)(app)


def test_keys_change_the_page_and_the_channel(snapshot):
    shown = snapshot(3)
    app = CrestwatchApp(lambda: shown, settings=Settings())

    async def test(app, pilot):
        await pilot.press("2")
        assert "way 1, 2 cycles" in _text(app)
        await pilot.press("right", "plus")
        assert "way 2, 3 cycles" in _text(app)
        await pilot.press("left", "left", "minus", "minus")
        assert "way 3, 1 cycle" in _text(app)
        await pilot.press("1")
        assert "averaging meter would show" in _text(app)

    _drive(test)(app)


def test_freeze_holds_the_picture_while_measuring_goes_on(snapshot):
    shown = [snapshot(1)]
    app = CrestwatchApp(lambda: shown[0], settings=Settings())

    async def test(app, pilot):
        await pilot.press("2", "space")
        shown[0] = snapshot(1, number=2, seconds=95.0)
        await pilot.pause(0.3)
        assert "1 min 00 s" in _text(app)
        assert "FROZEN" in _text(app)
        await pilot.press("space")
        await pilot.pause(0.2)
        assert "1 min 35 s" in _text(app)

    _drive(test)(app)


def test_help_is_made_from_the_bindings(snapshot):
    shown = snapshot(1)
    app = CrestwatchApp(lambda: shown, settings=Settings())

    async def test(app, pilot):
        await pilot.press("question_mark")
        text = _text(app)
        for binding in app.BINDINGS:
            assert binding.description in text
        await pilot.press("x")
        assert "averaging meter would show" in _text(app)

    _drive(test)(app)


def test_a_storm_of_sizes_ends_with_the_right_picture(snapshot):
    shown = snapshot(4)
    app = CrestwatchApp(lambda: shown, settings=Settings())
    sizes = random.Random(8)

    async def test(app, pilot):
        for _ in range(40):
            await pilot.resize_terminal(sizes.randint(1, 300), sizes.randint(1, 100))
            if sizes.random() < 0.3:
                await pilot.press(sizes.choice(("1", "2", "space", "right", "plus")))
        await pilot.press("1")
        await pilot.resize_terminal(80, 24)
        await pilot.pause(0.2)
        assert "averaging meter would show" in _text(app)
        assert len(app._canvas._lines) == 24

    _drive(test)(app)


def test_q_leaves(snapshot):
    shown = snapshot(1)
    app = CrestwatchApp(lambda: shown, settings=Settings())

    async def test(app, pilot):
        await pilot.press("q")
        assert app._exit

    _drive(test)(app)


@pytest.mark.parametrize(
    ("encoding", "term", "expected"),
    [
        ("utf-8", "xterm-256color", "braille"),
        ("utf-8", "linux", "half"),
        ("ascii", "xterm", "ascii"),
        ("iso8859-1", "xterm", "ascii"),
        ("utf-8", "dumb", "ascii"),
    ],
)
def test_glyphs_follow_the_terminal(encoding, term, expected):
    assert _glyphs_of_terminal(encoding, term) == expected


@pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
@pytest.mark.slow
@pytest.mark.parametrize(("width", "height"), [(80, 24), (120, 40)])
def test_the_real_command_in_a_real_terminal(width, height):
    """The installed command on a pty, its bytes read by a terminal emulator (pyte)."""
    import fcntl
    import pty
    import struct
    import termios

    command = str(Path(sys.executable).with_name("crestwatch"))
    pid, master = pty.fork()
    if pid == 0:
        environment = {**os.environ, "TERM": "xterm-256color", "LANG": "C.UTF-8"}
        environment.pop("NO_COLOR", None)
        os.execve(command, [command, "watch", "sim:hall"], environment)
    fcntl.ioctl(master, termios.TIOCSWINSZ, struct.pack("HHHH", height, width, 0, 0))
    screen = pyte.Screen(width, height)
    stream = pyte.ByteStream(screen)

    def read_until(wanted: str, seconds: float) -> str:
        import select

        end = time.monotonic() + seconds
        while time.monotonic() < end:
            ready, _, _ = select.select([master], [], [], 0.2)
            if ready:
                # pyte does not know these newer private modes (keyboard, synchronised output).
                data = os.read(master, 65536)
                stream.feed(re.sub(rb"\x1b\[[<>=?][0-9;]*[up]|\x1b\[\?[0-9;]*\$p", b"", data))
            text = "\n".join(screen.display)
            if wanted in text:
                return text
        raise AssertionError(f"{wanted!r} did not appear:\n" + "\n".join(screen.display))

    try:
        read_until("proof of dead", 20)
        os.write(master, b"\r")
        read_until("averaging meter would show", 10)
        read_until("way 7 V", 10)
        read_until("misleads", 10)
        os.write(master, b"2\x1b[C")
        read_until("harmonics", 10)
        read_until("true RMS", 10)
        os.write(master, b"q")
        _, status = os.waitpid(pid, 0)
        assert os.waitstatus_to_exitcode(status) == 0
    finally:
        os.close(master)
