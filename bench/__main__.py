"""`make bench`: every figure, or those of the parts named: `python -m bench accuracy speed`."""

import importlib
import os
import sys

PARTS = ("accuracy", "speed", "start", "screen", "stall")


def main() -> int:
    """Run the parts; 1 when a goal was missed."""
    for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS"):  # as the command does
        os.environ.setdefault(name, "1")
    names = sys.argv[1:] or list(PARTS)
    unknown = [name for name in names if name not in PARTS]
    if unknown:
        sys.stderr.write(f"bench: no part {unknown[0]}; there are {', '.join(PARTS)}\n")
        return 2
    reached = [importlib.import_module(f"bench.{name}").run() for name in names]
    return 0 if all(reached) else 1


if __name__ == "__main__":
    sys.exit(main())
