"""Records: what `--json-lines` prints and an export repeats. One mapping a line.

SI units without prefix, seconds, percent where the name ends in `_pct`; a figure that does not
exist is None, never NaN. Fields are only ever added.
"""

import math
from collections.abc import Mapping, Sequence

from acquisition.accounting import Tally
from acquisition.status import ReaderStatus
from acquisition.stream import StreamInfo
from dsp.power import Power
from dsp.reading import Reading
from dsp.verdict import Verdict
from dsp.waveform import Channel
from dsp.window import Lock
from shift.event import Event
from shift.summary import Summary

SCHEMA = 1

Value = float | int | str | bool | None | Sequence["Value"] | Mapping[str, "Value"]
Record = dict[str, Value]

# Field of `u` in a record: name there, name in a Reading, factor.
_U_FIELDS = (
    ("rms", "rms", 1.0),
    ("mean", "mean", 1.0),
    ("arv", "arv", 1.0),
    ("peak", "peak", 1.0),
    ("crest_factor", "crest_factor", 1.0),
    ("form_factor", "form_factor", 1.0),
    ("fundamental", "fundamental", 1.0),
    ("thd_f_pct", "thd_f", 100.0),
    ("frequency_hz", "frequency", 1.0),
    ("averaging_reading", "averaging", 1.0),
    ("averaging_error_pct", "averaging_error", 100.0),
    ("firing_angle_deg", "firing_angle", 180.0 / math.pi),
)


def source_record(
    source: str,
    info: StreamInfo,
    rate: float | None,
    channels: Sequence[Channel],
    nominal: float | None,
) -> Record:
    """The first record: what is being read."""
    return {
        "record": "source",
        "schema": SCHEMA,
        "source": source,
        "format": info.format,
        "sample_rate_hz": number(rate),
        "channels": [{"name": c.name, "unit": c.unit, "kind": c.kind.value} for c in channels],
        "nominal_hz": number(nominal),
        "started": info.started,
        "notes": list(info.notes),
    }


def window_record(channel: Channel, reading: Reading, verdicts: Sequence[Verdict]) -> Record:
    """One channel in one window. The first verdict is that on the averaging meter."""
    fundamental = reading.fundamental
    harmonics: list[Value] = []
    if fundamental > 0.0:
        harmonics = [number(100.0 * float(abs(h)) / fundamental) for h in reading.harmonics]
    lock = Lock.UNLOCKED if reading.lock is Lock.SEARCHING else reading.lock
    return {
        "record": "window",
        "channel": channel.name,
        "unit": channel.unit,
        "start_s": number(reading.start, 12),
        "duration_s": number(reading.duration),
        "cycles": reading.cycles or None,
        "frequency_hz": number(reading.frequency),
        "lock": lock.value,
        "rms": number(reading.rms),
        "mean": number(reading.mean),
        "arv": number(reading.arv),
        "peak_max": number(reading.peak_max),
        "peak_min": number(reading.peak_min),
        "peak": number(reading.peak),
        "crest_factor": number(reading.crest_factor),
        "form_factor": number(reading.form_factor),
        "fundamental": number(fundamental),
        "thd_f_pct": number(100.0 * reading.thd_f),
        "harmonics_pct": harmonics,
        "averaging_reading": number(reading.averaging),
        "averaging_error_pct": number(100.0 * reading.averaging_error),
        "averaging_error_u_pct": number(100.0 * reading.u.get("averaging_error", math.nan)),
        "verdict": verdicts[0].judgement.value if verdicts else "unsure",
        "meters": {
            v.card: {
                "reading": number(v.reading),
                "error_pct": number(100.0 * v.error),
                "error_u_pct": number(100.0 * v.u_error),
                "verdict": v.judgement.value,
            }
            for v in verdicts
        },
        "firing_angle_deg": number(math.degrees(reading.firing_angle)),
        "u": {
            name: number(factor * reading.u[key])
            for name, key, factor in _U_FIELDS
            if key in reading.u
        },
        "flags": list(reading.flags.words()),
    }


def pair_record(power: Power) -> Record:
    """Power of one pair in one window."""
    return {
        "record": "pair",
        "voltage": power.voltage,
        "current": power.current,
        "start_s": number(power.start, 12),
        "duration_s": number(power.duration),
        "p_w": number(power.p),
        "s_va": number(power.s),
        "pf": number(power.pf),
        "dpf": number(power.dpf),
        "q1_var": number(power.q1),
        "distortion_va": number(power.distortion),
        "energy_wh": number(power.energy, 12),
        "u": {"p_w": number(power.u_p)},
    }


def event_record(event: Event) -> Record:
    """One phase of one event."""
    return {
        "record": "event",
        "number": event.number,
        "kind": event.kind,
        "phase": event.phase.value,
        "channel": event.channel,
        "start_s": number(event.start, 12),
        "duration_s": None if event.duration is None else number(event.duration),
        "value": None if event.value is None else number(event.value),
        "unit": event.unit,
        "words": event.words,
    }


def stream_record(status: ReaderStatus, seconds: float) -> Record:
    """The account of the stream so far."""
    tally: Tally = status.tally
    clock = status.clock
    return {
        "record": "stream",
        "at_s": number(seconds, 12),
        "state": status.state.value,
        "received_samples": tally.received,
        "lost_samples": tally.lost,
        "bad_frames": tally.bad_frames,
        "discarded_bytes": tally.discarded_bytes,
        "reconnects": tally.reconnects,
        "reboots": tally.reboots,
        "duplicates": tally.duplicates,
        "discarded_in_logger": tally.discarded_in_logger,
        "host_overrun": tally.host_overrun,
        "sample_rate_measured_hz": None if clock is None else number(clock.rate, 10),
        "clock_ppm": None if clock is None or clock.ppm is None else number(clock.ppm, 6),
        "clock_ppm_u": None if clock is None else number(1e6 * clock.u_rate, 6),
        "clock_basis": None if clock is None else clock.basis,
    }


def summary_record(summary: Summary) -> Record:
    """The last record of a channel."""
    record: Record = {"record": "summary", "channel": summary.channel.name}
    for name, spread, factor in (
        ("rms", summary.rms, 1.0),
        ("crest_factor", summary.crest_factor, 1.0),
        ("thd_f_pct", summary.thd_f, 100.0),
        ("averaging_error_pct", summary.averaging_error, 100.0),
    ):
        record[name] = {
            "min": number(factor * spread.low),
            "mean": number(factor * spread.mean),
            "max": number(factor * spread.high),
        }
    record["rms_of_values"] = number(summary.rms.root_mean_square)
    record["windows"] = summary.windows
    record["windows_misleading"] = summary.windows_misleading
    record["seconds_covered"] = number(summary.seconds_covered, 12)
    record["seconds_lost"] = number(summary.seconds_lost, 12)
    return record


def number(value: float | None, digits: int = 9) -> float | None:
    """A figure fit for a record: `digits` significant digits, None where there is none."""
    if value is None or not math.isfinite(value):
        return None
    return float(f"{value:.{digits}g}")
