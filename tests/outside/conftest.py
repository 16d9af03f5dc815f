"""Real recordings, fetched by the test run and never committed.

The source package pyComtrade 0.2.0 (GPL: fetched, not copied, not imported) carries three
recordings of generators and a transformer; that of comtrade 0.2.0 (MIT) carries small samples.
"""

import subprocess
import sys
import tarfile
import zipfile
from pathlib import Path

import pytest

CACHE = Path(__file__).parents[2] / ".cache" / "recordings"
# What pip says when there is no way to the registry; anything else is a failure of the test.
UNREACHABLE = (
    "Temporary failure", "Connection", "connection", "timed out", "Network is unreachable",
    "No matching distribution", "ProxyError",
)  # fmt: skip


def fetched(package: str, archive: str) -> Path:
    """The source archive of a package, from the cache or through pip."""
    path = CACHE / archive
    if path.is_file():
        return path
    CACHE.mkdir(parents=True, exist_ok=True)
    said = ""
    # pip builds metadata to look at a source package; an old one may not build in isolation.
    for more in ([], ["--no-build-isolation"]):
        ran = subprocess.run(
            [
                sys.executable, "-m", "pip", "download", "--quiet", "--no-deps",
                "--no-binary", ":all:", "--dest", str(CACHE), *more, package,
            ],
            capture_output=True, text=True, check=False,
        )  # fmt: skip
        if path.is_file():
            return path
        said = ran.stderr
    if any(words in said for words in UNREACHABLE):
        pytest.skip(f"{package} cannot be fetched: {said.strip().splitlines()[-1]}")
    pytest.fail(f"pip could not fetch {package}: {said}")


@pytest.fixture(scope="session")
def real_recordings() -> Path:
    """A folder with test1, test2, test3, each a .cfg and a .dat."""
    archive = fetched("pyComtrade==0.2.0", "pyComtrade-0.2.0.zip")
    folder = CACHE / "real"
    folder.mkdir(exist_ok=True)
    with zipfile.ZipFile(archive) as packed:
        for info in packed.infolist():
            name = Path(info.filename).name
            if "/examples/" in info.filename and name.endswith((".cfg", ".dat")):
                (folder / name).write_bytes(packed.read(info))
    return folder


@pytest.fixture(scope="session")
def small_samples() -> Path:
    """A folder with the sample files of the package comtrade."""
    archive = fetched("comtrade==0.2.0", "comtrade-0.2.0.tar.gz")
    folder = CACHE / "small"
    folder.mkdir(exist_ok=True)
    with tarfile.open(archive) as packed:
        for member in packed.getmembers():
            path = Path(member.name)
            file = packed.extractfile(member) if path.parent.name == "sample_files" else None
            if file is not None:
                (folder / path.name).write_bytes(file.read())
    return folder
