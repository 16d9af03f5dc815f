"""AutoDecoder: listens until it knows the format, then hands everything to the decoder for it.

Nothing that came while listening is lost: the right decoder gets it all, in order. What stays
unknown keeps being tried on the latest bytes, in bounded memory, and `problem` says how it looks.
"""

from acquisition.accounting import Tally
from acquisition.block import Block
from acquisition.errors import NotSamples
from acquisition.sniff import Identification, describe_bytes, identify
from acquisition.stream import StreamInfo
from acquisition.wire.crestwire import CrestwireDecoder
from acquisition.wire.decoder import Decoder
from acquisition.wire.raw import PLAIN, RawDecoder
from acquisition.wire.text import TextDecoder

FIRST_LOOK = 512  # bytes; doubled until known
RAW_LOOK = 4096  # raw is believed from here on, and only when two looks agree
HELD_LIMIT = 1 << 17  # bytes kept while unknown
COMPLAIN = 1 << 13  # bytes after which `problem` speaks


class AutoDecoder:
    """A Decoder for whatever comes; see `acquisition.wire.decoder.Decoder`."""

    def __init__(
        self,
        format: str | None = None,  # noqa: A002 - the word of the command line
        *,
        rate: float | None = None,
        channels: int | None = None,
        sample_type: str | None = None,
        byte_order: str | None = None,
    ) -> None:
        """Fix the format or leave it open.

        Args:
            format: None to find out; "crestwire", "text", "raw", or with its particulars
                "raw:u16:2" or "raw:i16:3:big" (type, channels, byte order).
            rate: sets a second, when the person said so.
            channels, sample_type, byte_order: particulars of "raw", when not in `format`.
        Raises:
            NotSamples: `format` is none of these.
        """
        self.identification: Identification | None = None
        self._rate = rate
        self._decoder: Decoder | None = None
        self._held = bytearray()
        self._next_look = FIRST_LOOK
        self._before: Identification | None = None  # what the look before this said
        self._problem = ""
        self._discarded = 0
        self._reconnects = 0
        self._only_raw = False
        if format is not None:
            self._fix(format, channels, sample_type, byte_order)

    @property
    def info(self) -> StreamInfo | None:
        """What the stream says of itself; None until identified."""
        return self._decoder.info if self._decoder is not None else None

    @property
    def problem(self) -> str:
        """What is wrong, or ""."""
        return self._decoder.problem if self._decoder is not None else self._problem

    @property
    def tally(self) -> Tally:
        """The account so far; loss is unknown until the format is known."""
        if self._decoder is None:
            return Tally(
                lost=None,
                discarded_bytes=self._discarded,
                reconnects=self._reconnects,
            )
        return self._decoder.tally

    def feed(self, data: bytes, arrived: float) -> list[Block]:
        """Look, then decode."""
        if self._decoder is not None:
            return self._decoder.feed(data, arrived)
        # Looks happen at fixed lengths, so that slicing does not change what is found.
        at = 0
        while at < len(data):
            wanted = self._next_look - len(self._held)
            self._held += data[at : at + wanted]
            at += wanted
            if len(self._held) < self._next_look:
                break
            decoder = self._look()
            if decoder is not None:
                return self._begin(decoder, data[at:], arrived)
        return []

    def reconnected(self) -> None:
        """The link is back; bytes held while listening do not go on from there."""
        self._reconnects += 1
        if self._decoder is not None:
            self._decoder.reconnected()
            return
        self._discarded += len(self._held)
        self._held.clear()
        self._next_look = FIRST_LOOK
        self._before = None

    def finish(self) -> list[Block]:
        """The stream has ended: decide on what there is."""
        blocks: list[Block] = []
        if self._decoder is None and self._held:
            found = identify(bytes(self._held))
            self.identification = found
            decoder = self._decoder_for(found)
            if decoder is None:
                self._complain(found)
                return []
            blocks = self._begin(decoder, b"", float("nan"))
        if self._decoder is not None:
            blocks += self._decoder.finish()
        return blocks

    def _fix(
        self, wanted: str, channels: int | None, sample_type: str | None, byte_order: str | None
    ) -> None:
        name, _, rest = wanted.partition(":")
        if name == "crestwire" and not rest:
            self._decoder = CrestwireDecoder()
        elif name == "text" and not rest:
            self._decoder = TextDecoder(self._rate)
        elif name == "raw":
            self._fix_raw(wanted, rest, channels, sample_type, byte_order)
        else:
            raise _unknown_format(wanted)

    def _fix_raw(
        self,
        wanted: str,
        rest: str,
        channels: int | None,
        sample_type: str | None,
        byte_order: str | None,
    ) -> None:
        parts = rest.split(":") if rest else []
        if len(parts) > 3:
            raise _unknown_format(wanted)
        if parts:
            sample_type = parts[0]
        if len(parts) > 1:
            if not parts[1].isdecimal():
                raise _unknown_format(wanted)
            channels = int(parts[1])
        if len(parts) > 2:
            byte_order = parts[2]
        if channels is None:
            self._only_raw = True
            return
        kind = (sample_type or "u16", byte_order or "little")
        if kind not in PLAIN or not 1 <= channels <= 32:
            raise _unknown_format(wanted)
        self._decoder = RawDecoder(channels, *kind, rate=self._rate)

    def _look(self) -> Decoder | None:
        found = identify(bytes(self._held))
        self.identification = found
        decoder = self._decoder_for(found)
        if decoder is not None and found.format == "raw":
            # Raw cannot be proved: two looks at growing lengths must say the same.
            before = self._before
            agreed = before is not None and _same(before, found)
            if len(self._held) < RAW_LOOK or not agreed or found.ambiguous:
                decoder = None
        self._before = found
        if decoder is not None:
            return decoder
        if len(self._held) >= COMPLAIN:
            self._complain(found)
        if len(self._held) >= HELD_LIMIT:
            drop = HELD_LIMIT // 2
            self._discarded += drop
            del self._held[:drop]
            self._next_look = HELD_LIMIT
        else:
            self._next_look = len(self._held) * 2
        return None

    def _decoder_for(self, found: Identification) -> Decoder | None:
        if found.format == "crestwire" and not self._only_raw:
            return CrestwireDecoder()
        if found.format == "text" and not self._only_raw:
            return TextDecoder(self._rate)
        if found.format == "raw":
            return RawDecoder(
                found.channels,
                found.sample_type,
                found.byte_order,
                self._rate,
                notes=(
                    f"raw words, taken for {found.channels} x {found.sample_type}"
                    f" {found.byte_order}-endian; confirm it with --format"
                    f" raw:{found.sample_type}:{found.channels}:{found.byte_order}",
                    "raw words carry no check: lost bytes cannot be counted",
                ),
            )
        return None

    def _begin(self, decoder: Decoder, rest: bytes, arrived: float) -> list[Block]:
        self._decoder = decoder
        self._problem = ""
        held = bytes(self._held)
        if isinstance(decoder, RawDecoder) and self.identification is not None:
            held = held[self.identification.offset :]
        self._held = bytearray()
        return decoder.feed(held + rest, arrived)

    def _complain(self, found: Identification) -> None:
        looks = describe_bytes(bytes(self._held))
        if found.format is None:
            self._problem = (
                f"what comes is no stream of samples that this program knows; it begins {looks}"
            )
        elif found.ambiguous:
            self._problem = (
                f"this looks like raw words, but {found.ambiguous[0]};"
                f" tell with --format raw:TYPE:CHANNELS:ORDER, such as"
                f" raw:{found.sample_type}:{found.channels}:{found.byte_order}"
            )


def _same(a: Identification, b: Identification) -> bool:
    return (a.format, a.channels, a.sample_type, a.byte_order) == (
        b.format,
        b.channels,
        b.sample_type,
        b.byte_order,
    )


def _unknown_format(wanted: str) -> NotSamples:
    error = NotSamples(f"{wanted} is no format known here")
    error.add_note(
        "known are crestwire, text, raw, and raw:TYPE:CHANNELS:ORDER as in raw:u16:2:big"
    )
    return error
