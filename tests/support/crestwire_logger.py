"""A board that sends crestwire frames, and what tests ask of the decoded Blocks."""

import numpy as np

from acquisition.block import Block, BlockFlag
from acquisition.wire.crestwire import CrestwireDecoder
from acquisition.wire.crestwire_encode import encode_data, encode_frame
from acquisition.wire.crestwire_frame import Kind

PER_SET = 125  # ticks at 8000 sets/s and 1 MHz
M32 = 1 << 32


class Logger:
    """Sends frames as a board would, written apart from the encoder's users in sim."""

    def __init__(self, boot=1, index=0, sequence=0, tick=0, channels=2, sets=16):
        self.boot, self.index, self.sequence, self.tick = boot, index, sequence, tick
        self.channels, self.sets = channels, sets
        self.salt = 0

    def data(self, sets=None, flags=0, sample_type="u16"):
        sets = self.sets if sets is None else sets
        # The code tells which set of which boot it is, so that a wrong place would show.
        counted = (self.index + np.arange(sets)) % 4096
        codes = np.stack([counted + 4096 * c + self.salt for c in range(self.channels)])
        frame = encode_data(codes, **self._head(), flags=flags, sample_type=sample_type)
        self._on(sets)
        return frame

    def other(self, kind=Kind.STATUS, payload=b""):
        frame = encode_frame(kind, payload, **self._head(), channels=self.channels, sample_code=1)
        self._on(0)
        return frame

    def discard(self, sets):
        self.index += sets
        self.tick += sets * PER_SET

    def reboot(self, boot=None):
        self.boot = (self.boot + 1) % 256 if boot is None else boot
        self.index = self.sequence = self.tick = 0
        self.salt = 2048  # as noise would, this tells a new boot's samples from the old one's

    def _head(self):
        return {
            "boot": self.boot,
            "sequence": self.sequence,
            "index": self.index,
            "tick": self.tick,
        }

    def _on(self, sets):
        self.index += sets
        self.sequence += 1
        self.tick += sets * PER_SET


def decode(pieces, arrived=0.0):
    decoder = CrestwireDecoder()
    blocks = [block for piece in pieces for block in decoder.feed(piece, arrived)]
    blocks += decoder.finish()
    return decoder, blocks


def joined(blocks):
    return np.concatenate([b.codes for b in blocks], axis=1) if blocks else np.empty((0, 0))


def shape_of(blocks: list[Block]):
    """What must not depend on slicing: samples, places, gaps."""
    out = []
    for block in blocks:
        if out and not block.gap_before and not block.flags & BlockFlag.REBOOT:
            out[-1][-1].append(block.codes)
        else:
            out.append(
                [block.index, block.lost_before, block.gap_before, block.boot, [block.codes]]
            )
    return [(*rest, np.concatenate(codes, axis=1).tolist()) for *rest, codes in out]
