"""Units as technicians write them, and what their prefixes are worth."""

import re

from dsp.waveform import Kind

_PREFIXES = {"M": 1e6, "k": 1e3, "K": 1e3, "": 1.0, "m": 1e-3, "u": 1e-6, "µ": 1e-6, "μ": 1e-6}
_MEANT = {
    "v": "V", "volt": "V", "volts": "V", "a": "A", "amp": "A", "amps": "A", "ampere": "A",
    "amperes": "A", "kv": "kV", "ka": "kA", "mv": "mV", "ma": "mA",
}  # fmt: skip


def si_unit(unit: str) -> tuple[str, float]:
    """A unit without its prefix, and what the prefix is worth: "kV" -> ("V", 1000.0)."""
    found = re.fullmatch(r"([MkKmuµμ]?)(V|A)", unit.strip())
    return (found[2], _PREFIXES[found[1]]) if found else (unit.strip(), 1.0)


def kind_of(unit: str) -> Kind:
    """What a unit measures."""
    bare, _ = si_unit(unit)
    return Kind.VOLTAGE if bare == "V" else Kind.CURRENT if bare == "A" else Kind.OTHER


def likely_meant(unit: str) -> str | None:
    """The unit that a slip such as "volts" or "ka" most likely means; None when it is none."""
    if si_unit(unit)[0] in ("V", "A"):
        return None
    return _MEANT.get(unit.strip().lower())
