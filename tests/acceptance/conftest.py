"""Runs the installed command as a person would, and serves simulated loggers to it."""

import json
import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

COMMAND = [str(Path(sys.executable).with_name("crestwatch"))]


class Ran:
    """What a command left behind."""

    def __init__(self, code: int, out: bytes, err: bytes) -> None:
        self.code, self.out_bytes, self.err_bytes = code, out, err
        self.out, self.err = out.decode(errors="replace"), err.decode(errors="replace")

    def records(self, kind: str | None = None) -> list[dict]:
        def refuse(text: str) -> None:
            raise AssertionError(f"{text} is no JSON number")

        all_ = [json.loads(line, parse_constant=refuse) for line in self.out.splitlines()]
        return [one for one in all_ if kind is None or one["record"] == kind]


@pytest.fixture
def run() -> Callable[..., Ran]:
    def _run(*arguments: str, timeout: float = 60.0, **environment: str) -> Ran:
        done = subprocess.run(
            COMMAND + list(arguments),
            capture_output=True,
            timeout=timeout,
            stdin=subprocess.DEVNULL,
            env={**os.environ, **environment},
            check=False,
        )
        return Ran(done.returncode, done.stdout, done.stderr)

    return _run


@pytest.fixture
def simulate() -> Iterator[Callable[..., str]]:
    """Start `crestwatch simulate …`; gives the address it prints."""
    running: list[subprocess.Popen[str]] = []

    def _simulate(*arguments: str) -> str:
        process = subprocess.Popen(
            [*COMMAND, "simulate", *arguments],
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        running.append(process)
        assert process.stdout is not None
        return process.stdout.readline().strip()

    yield _simulate
    for process in running:
        process.terminate()
        process.wait(10)
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        process.stderr.close()
