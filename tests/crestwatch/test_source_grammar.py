"""SOURCE is one grammar: what the README's command table promises, taken apart."""

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from crestwatch.diagnostics import UsageError
from crestwatch.source import FileSource, SerialSource, SimSource, TcpSource, parse_source

CASES = {
    "a simulated scene": ("sim:hall", SimSource("hall")),
    "a simulated scene with options": (
        "sim:hall?ppm=40&seed=3",
        SimSource("hall", {"ppm": "40", "seed": "3"}),
    ),
    "a Linux device": ("/dev/ttyACM0", SerialSource("/dev/ttyACM0")),
    "a Windows port, however typed": ("com3", SerialSource("COM3")),
    "a device with a baud rate": (
        "serial:/dev/ttyUSB0?baud=115200",
        SerialSource("/dev/ttyUSB0", {"baud": "115200"}),
    ),
    "a socket": ("tcp://127.0.0.1:5000", TcpSource("127.0.0.1", 5000)),
    "a socket on IPv6": ("tcp://[::1]:5000", TcpSource("::1", 5000)),
    "a recording": ("evening.wav", FileSource(Path("evening.wav"))),
}

REFUSED = {
    "nothing": "",
    "no port": "tcp://127.0.0.1",
    "a port too large": "tcp://127.0.0.1:70000",
    "no host": "tcp://:5000",
    "another scheme": "http://127.0.0.1/",
    "no device": "serial:?baud=9600",
    "options that are none": "sim:hall?ppm",
}


@pytest.mark.parametrize("sentence", CASES)
def test_sources_are_taken_apart(sentence: str) -> None:
    text, expected = CASES[sentence]
    assert parse_source(text) == expected


@pytest.mark.parametrize("sentence", REFUSED)
def test_what_fits_no_form_is_refused_with_advice(sentence: str) -> None:
    with pytest.raises(UsageError) as caught:
        parse_source(REFUSED[sentence])
    assert caught.value.__notes__


def test_a_character_device_is_a_serial_source(tmp_path: Path) -> None:
    link = tmp_path / "logger"
    link.symlink_to("/dev/null")
    assert parse_source(str(link)) == SerialSource(str(link))


@given(st.text(max_size=60))
def test_any_text_is_either_a_source_or_refused(text: str) -> None:
    try:
        parse_source(text)
    except UsageError:
        pass
    except (ValueError, OSError) as error:
        # A NUL byte or an over-long name is the operating system's to refuse.
        assert "\0" in text or "long" in str(error)
