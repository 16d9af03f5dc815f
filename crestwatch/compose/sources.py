"""Sources made real: a link to open, a recording, a simulated logger, a setup."""

from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path

from acquisition.link import Link
from acquisition.links import pace
from acquisition.recordings.open import open_recording
from acquisition.recordings.recording import Recording, RecordingOptions
from acquisition.stream import clean
from crestwatch.diagnostics import UsageError
from crestwatch.source import SerialSource, SimSource, Source, TcpSource
from rig.setup import Setup
from rig.setup_file import load as load_setup
from sim import device as sim_device
from sim import scenes as sim_scenes
from sim.device import LoggerSpec
from sim.errors import SimError
from sim.faults import parse as parse_faults

DEFAULT_BAUD = 115200  # what most boards' examples use; USB boards ignore it


def setup_for(path: Path | None, nominal: float | None, limit_pct: float | None) -> Setup:
    """The setup in a file, or none, with what the command line overrides.

    Raises:
        SetupError: the file is not a setup; the message names the line.
    """
    setup = load_setup(path) if path is not None else Setup.empty()
    if nominal is not None:
        setup = replace(setup, nominal_hz=nominal)
    if limit_pct is not None:
        setup = replace(setup, limit=limit_pct / 100.0)
    return setup


def recording(
    path: Path,
    rate: float | None = None,
    scale: Mapping[str, tuple[float, str]] | None = None,
    format_: str | None = None,
) -> Recording:
    """Open a recording.

    Args:
        scale: channel -> (units at full scale, the unit or "").
    Raises:
        RecordingError: it is missing or is no recording of a known kind.
    """
    scale = scale or {}
    numbers = {name: number for name, (number, _) in scale.items()}
    opened = open_recording(path, RecordingOptions(rate=rate, scale=numbers, format=format_))
    units = {name: unit for name, (_, unit) in scale.items() if unit}
    if units:
        hints = tuple(
            replace(hint, unit=units.get(hint.name, hint.unit)) for hint in opened.info.channels
        )
        opened.info = replace(opened.info, channels=hints)
    return opened


def opener(source: Source, setup: Setup, speed: float, baud: int | None) -> Callable[[], Link]:
    """How to open the source, now and again after a loss."""
    if isinstance(source, SimSource):
        spec = sim_spec(source)
        return lambda: pace.Paced(sim_device.frames(spec), f"sim:{source.scene}", speed)
    if isinstance(source, TcpSource):
        from acquisition.links.tcp import TcpLink

        return lambda: TcpLink(source.host, source.port)
    assert isinstance(source, SerialSource)
    from acquisition.links.serial_port import SerialOpener

    options = dict(source.options)
    rate = baud or _baud(options.pop("baud", None)) or setup.baud or DEFAULT_BAUD
    if options:
        error = UsageError(
            f"serial: {clean(next(iter(options)), 30)} is no option of a serial device"
        )
        error.add_note("there is baud, as in serial:/dev/ttyUSB0?baud=115200")
        raise error
    return SerialOpener(source.device, rate)


def _baud(text: str | None) -> int | None:
    if text is None:
        return None
    if not text.isdecimal() or not 0 < int(text) <= 20_000_000:
        raise UsageError(f"baud={clean(text, 20)} is not a baud rate such as 115200")
    return int(text)


def sim_spec(source: SimSource) -> LoggerSpec:
    """A simulated logger from `sim:SCENE?key=value&…`; keys are those of `simulate`."""
    options = dict(source.options)

    def number(key: str, usual: float) -> float:
        text = options.pop(key, None)
        if text is None:
            return usual
        try:
            return float(text)
        except ValueError:
            raise UsageError(f"sim: {key}={clean(text, 30)} is not a number") from None

    rate = number("rate", 0.0)
    spec = logger_spec(
        source.scene,
        wire=options.pop("wire", "crestwire"),
        rate=rate or None,
        bits=int(number("bits", 12)),
        noise=number("noise", 0.5),
        ppm=number("ppm", 0.0),
        drift=number("drift", 0.0),
        seed=int(number("seed", 1)),
        faults=options.pop("faults", ""),
    )
    if options:
        error = UsageError(
            f"sim: {clean(next(iter(options)), 30)} is no option of a simulated logger"
        )
        error.add_note("there are wire, rate, bits, noise, ppm, drift, seed and faults")
        raise error
    return spec


def logger_spec(
    scene: str,
    *,
    wire: str = "crestwire",
    rate: float | None = None,
    bits: int = 12,
    noise: float = 0.5,
    ppm: float = 0.0,
    drift: float = 0.0,
    seed: int = 1,
    faults: str = "",
) -> LoggerSpec:
    """A simulated logger.

    Raises:
        UsageError: there is no such scene, or a fault does not read.
    """
    try:
        return _spec(scene, wire, rate, bits, noise, ppm, drift, seed, faults)
    except SimError as error:
        usage = UsageError(str(error))
        for advice in getattr(error, "__notes__", ()):
            usage.add_note(advice)
        raise usage from None


def _spec(
    scene: str,
    wire: str,
    rate: float | None,
    bits: int,
    noise: float,
    ppm: float,
    drift: float,
    seed: int,
    faults: str,
) -> LoggerSpec:
    found = sim_scenes.find(scene)
    # Text is long: at 8000 sets a second it would not fit a common serial line.
    usual = 2000.0 if wire == "text" else 8000.0
    spec = LoggerSpec(
        scene=found,
        format=wire,
        rate=rate or usual,
        bits=bits,
        noise_codes=noise,
        clock_ppm=ppm,
        drift_ppm=drift,
        seed=seed,
        sets_per_frame=32 if wire == "text" else 64,
        faults=parse_faults(faults),
    )
    sim_device.check(spec)
    return spec


def scene_list() -> list[tuple[str, str, str]]:
    """(name, title, description) of every scene."""
    scenes = [make() for make in sim_scenes.SCENES.values()]
    return [(scene.name, scene.title, scene.description) for scene in scenes]
