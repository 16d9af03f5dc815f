"""A simulated logger served to other programs."""

import time
from collections.abc import Callable
from pathlib import Path

from acquisition.links import far_end
from acquisition.stream import clean
from crestwatch.diagnostics import UsageError
from sim import device as sim_device
from sim.device import LoggerSpec


def serve(
    spec: LoggerSpec,
    where: str,
    speed: float,
    length: float | None,
    announce: Callable[[str], None],
) -> str:
    """Serve a simulated logger until `length` s have passed or it is interrupted.

    Args:
        where: "pty", "pty:LINK" or "tcp:PORT".
        announce: told the address to connect to.
    Returns:
        a sentence on what was sent.
    Raises:
        UsageError, LinkError: it cannot be served there.
    """
    end: far_end.PtyEnd | far_end.TcpEnd
    kind, _, rest = where.partition(":")
    if kind == "pty":
        end = far_end.PtyEnd(Path(rest) if rest else None)
    elif kind == "tcp" and rest.isdecimal():
        end = far_end.TcpEnd(int(rest))
    else:
        error = UsageError(f"--on {clean(where, 40)} is nowhere to serve")
        error.add_note("use --on pty, --on pty:LINK or --on tcp:PORT")
        raise error
    account = sim_device.Account()

    def threw_away(_: bytes) -> None:
        account.sent -= spec.sets_per_frame
        account.discarded += spec.sets_per_frame

    began = time.monotonic()
    try:
        announce(end.address)
        far_end.serve(
            sim_device.frames(spec, account),
            end,
            speed=speed,
            until=lambda: length is not None and time.monotonic() - began >= length,
            on_discard=threw_away,
        )
    except KeyboardInterrupt:
        pass  # how it is meant to end
    finally:
        end.close()
    return (
        f"sent {account.sent} sets of {len(spec.scene.channels)} channels; "
        f"{account.discarded} were discarded on board, in {account.boots} boots"
    )
