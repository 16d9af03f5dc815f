"""The zero of a converter that nobody told about: assumed at mid code, and said so.

A homemade logger biases its input to mid-supply, so its codes swing about the middle of the
converter's range. Without that the bias would count as DC and every verdict would be nonsense. The
running mean is never taken for the zero: it would hide real DC, such as a dimmer's that fires
unevenly. A zero capture, written to the setup, is better than any assumption.
"""

from dataclasses import replace

import numpy as np

from acquisition.block import Codes
from acquisition.stream import ChannelHint, StreamInfo
from rig.channels import matched
from rig.setup import ChannelSetup, Setup

ENOUGH = 0.25  # s of codes to judge by: a dozen cycles of mains
_BITS = (8, 10, 12, 14, 16)
_NEAR = 0.1  # of the range: a bias further from the middle is no bias to mid-supply
_UNSURE = 0.005  # of the range: tolerance of two bias resistors of 1 %, as a standard uncertainty


def needs_zero(setup: Setup, info: StreamInfo) -> bool:
    """Whether a channel's zero is told neither by the setup nor by the stream."""
    return info.format in ("text", "raw") and any(
        _untold(said, hint) for said, hint in zip(matched(setup, info), info.channels, strict=True)
    )


def with_zero(setup: Setup, info: StreamInfo, codes: Codes) -> StreamInfo:
    """The stream's description with the zeros that its first codes (channels, n) suggest."""
    hints, notes = [], list(info.notes)
    for said, hint, row in zip(matched(setup, info), info.channels, codes, strict=True):
        good = np.asarray(row, np.float64)
        good = good[np.isfinite(good)]
        if not _untold(said, hint) or not len(good) or good.min() < 0.0:
            hints.append(hint)  # negative values have their zero at 0
            continue
        bits = said.adc_bits or next((b for b in _BITS if good.max() < 2.0**b), None)
        whole = bool(np.all(good == np.rint(good)))
        mean = float(good.mean())
        if bits is not None and whole and abs(mean / 2.0**bits - 0.5) < _NEAR:
            middle = 2.0 ** (bits - 1)
            hints.append(
                replace(
                    hint,
                    offset_codes=-middle,
                    u_offset_codes=_UNSURE * 2.0**bits,
                    rails=hint.rails or (0.0, 2.0**bits - 1.0),
                )
            )
            notes.append(
                f"{hint.name}: the zero is taken at {middle:.0f}, mid code of {bits} bits; "
                "a zero capture in the setup (offset_codes) is better"
            )
        else:
            # Nothing suggests where zero is: no verdict may stand on it.
            hints.append(replace(hint, u_offset_codes=max(abs(mean), 1.0)))
            notes.append(
                f"{hint.name}: where its zero lies is not known, so meters cannot be compared; "
                "give offset_codes in the setup"
            )
    return replace(info, channels=tuple(hints), notes=tuple(notes))


def _untold(said: ChannelSetup, hint: ChannelHint) -> bool:
    return said.offset_codes is None and hint.gain is None and hint.offset_codes == 0.0
