"""The house stays in order: names, sizes, first lines, start-up imports, words, papers."""

import ast
import re
import subprocess
import sys
from pathlib import Path

import pytest

TOP = Path(__file__).resolve().parents[2]
ROOMS = ("crestwatch", "tui", "shift", "rig", "sim", "acquisition", "dsp")
LONGEST = 450  # lines, what one reading takes in


def _tracked(*patterns: str) -> list[Path]:
    done = subprocess.run(
        ["git", "ls-files", *patterns], cwd=TOP, capture_output=True, text=True, check=False
    )
    if done.returncode:  # an unpacked source archive has no history
        return [p for p in TOP.rglob("*.py") if ".venv" not in p.parts and ".cache" not in p.parts]
    return [TOP / line for line in done.stdout.splitlines() if (TOP / line).is_file()]


PYTHON = [p for p in _tracked("*.py") if p.relative_to(TOP).parts[0] in (*ROOMS, "tests", "bench")]
CODE = [p for p in PYTHON if p.relative_to(TOP).parts[0] in ROOMS]


def _name(path: Path) -> str:
    return str(path.relative_to(TOP))


def test_there_is_code_to_look_at():
    assert {p.relative_to(TOP).parts[0] for p in CODE} == set(ROOMS)


@pytest.mark.parametrize("path", PYTHON, ids=_name)
def test_a_file_says_what_it_is_for_and_stays_short(path):
    text = path.read_text(encoding="utf-8")
    words = ast.get_docstring(ast.parse(text))
    assert words, "the first line says what the file is for"
    assert text.count("\n") <= LONGEST
    assert path.stem not in ("utils", "helpers", "common", "types", "base", "misc")


@pytest.mark.parametrize("path", [p for p in CODE if p.name == "__init__.py"], ids=_name)
def test_an_init_is_one_docstring(path):
    assert len(ast.parse(path.read_text(encoding="utf-8")).body) == 1


@pytest.mark.parametrize(
    "statement",
    [
        "from crestwatch.cli import main; main(['--help'])",
        "from crestwatch.cli import main; main(['--version'])",
        "from crestwatch.cli import build_parser; build_parser('*')",
    ],
)
def test_help_loads_nothing_heavy(statement):
    code = (
        "import sys\n"
        f"try:\n    {statement}\nexcept SystemExit:\n    pass\n"
        "heavy = {'textual', 'numpy', 'serial', 'rich', 'asyncio'} & set(sys.modules)\n"
        "sys.exit(f'loaded {heavy}' if heavy else 0)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_a_measurement_loads_no_screen_and_no_port():
    code = (
        "import sys, crestwatch.compose.measuring\n"
        "heavy = {'textual', 'serial', 'scipy'} & set(sys.modules)\n"
        "sys.exit(f'loaded {heavy}' if heavy else 0)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_every_command_stands_in_the_readme_and_has_examples():
    import importlib

    from crestwatch.cli import COMMANDS

    readme = (TOP / "README.md").read_text(encoding="utf-8")
    for name in COMMANDS:
        assert f"| `crestwatch {name}" in readme, name
        module = importlib.import_module(f"crestwatch.commands.{name}")
        assert module.__doc__
        assert f"crestwatch {name}" in module.EXAMPLES
    told = set(re.findall(r"\| `crestwatch (\w+)", readme))
    assert told == set(COMMANDS)


def test_what_the_papers_point_at_is_there():
    for paper in (*TOP.glob("*.md"), *(TOP / "docs").glob("*.md")):
        for target in re.findall(r"\]\(([^)#]+)\)", paper.read_text(encoding="utf-8")):
            if "://" not in target:
                assert (paper.parent / target).exists(), f"{paper.name}: {target}"


def test_the_cautions_stand_in_the_readme():
    readme = (TOP / "README.md").read_text(encoding="utf-8")
    for subject in ("proof of dead", "CAT III", "isolating", "current transformer", "qualified"):
        assert subject in readme


def test_nothing_tracked_names_hosts_or_places_of_one_machine():
    # Written apart, so that this file does not find itself.
    unwanted = ["/" + "work/", "/" + "root/", "pypi" + ".org", "files.python" + "hosted",
                "trans" + "cript",
                "lec" + "ture", "seed " + "doc"]  # fmt: skip
    for path in _tracked():
        if path.suffix in (".svg", ".png") or path.is_dir():
            continue
        text = path.read_text(encoding="utf-8", errors="replace").lower()
        found = [word for word in unwanted if word in text]
        assert not found, (_name(path), found)


def test_every_key_of_a_setup_stands_on_its_page_and_no_other():
    from rig import setup

    page = (TOP / "docs" / "setup.md").read_text(encoding="utf-8")
    keys = {*setup.TOP_KEYS, *setup.LOGGER_KEYS, *setup.CHANNEL_KEYS, *setup.PAIR_KEYS}
    tables = [line.split("|")[1] for line in page.splitlines() if line.startswith("| `")]
    told = {key for cell in tables for key in re.findall(r"`(\w+)`", cell)}
    assert told <= keys
    assert not [key for key in keys if f"`{key}`" not in page and f"{key}]" not in page]


def test_the_setup_lines_on_the_papers_load():
    from rig.setup import parse

    for paper in (*TOP.glob("*.md"), *(TOP / "docs").glob("*.md")):
        for text in re.findall(r"```toml\n(.*?)```", paper.read_text(encoding="utf-8"), re.DOTALL):
            parse(text, paper.name)


def test_what_is_installed_is_what_the_rooms_import():
    import tomllib

    project = tomllib.loads((TOP / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    asked = {re.split(r"[<>=~!\[; ]", one)[0] for one in project["dependencies"]}
    optional = {"soundfile"}  # the extra "sound"
    imported = set()
    for path in CODE:
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Import):
                imported |= {alias.name.split(".")[0] for alias in node.names}
            elif isinstance(node, ast.ImportFrom) and node.module:
                imported.add(node.module.split(".")[0])
    foreign = imported - set(ROOMS) - set(sys.stdlib_module_names) - optional
    named = {"serial": "pyserial"}  # imported under another name than it is installed by
    assert {named.get(one, one) for one in foreign} == asked


def test_the_version_is_one_and_stands_in_the_changes():
    import tomllib

    from crestwatch.cli import main

    project = tomllib.loads((TOP / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    done = subprocess.run(
        [sys.executable, "-c", f"from {main.__module__} import main; main(['--version'])"],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert project["version"] in done.stdout
    assert f"## {project['version']}" in (TOP / "CHANGELOG.md").read_text(encoding="utf-8")


def test_the_example_setup_loads():
    from rig.setup_file import load

    setup = load(TOP / "docs" / "example-setup.toml")
    assert [c.name for c in setup.channels] == ["supply", "way 1"]
    assert setup.pairs == (("supply", "way 1"),)


@pytest.mark.slow
def test_the_wheel_holds_the_rooms_and_runs_in_a_clean_environment(tmp_path):
    import venv
    import zipfile

    built = subprocess.run(
        [sys.executable, "-m", "build", "--wheel", "--outdir", str(tmp_path), str(TOP)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert built.returncode == 0, built.stdout + built.stderr
    (wheel,) = tmp_path.glob("*.whl")
    with zipfile.ZipFile(wheel) as archive:
        names = archive.namelist()
    tops = {n.split("/")[0] for n in names}
    assert {t for t in tops if not t.endswith(".dist-info")} == set(ROOMS)
    assert not [n for n in names if n.endswith(".pyc")]
    room = tmp_path / "clean"
    venv.create(room, with_pip=True)
    binaries = room / ("Scripts" if sys.platform == "win32" else "bin")
    installed = subprocess.run(
        [str(binaries / "python"), "-m", "pip", "install", "--quiet", str(wheel)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert installed.returncode == 0, installed.stderr
    ran = subprocess.run(
        [str(binaries / "crestwatch"), "--help"], capture_output=True, text=True, check=False
    )
    assert ran.returncode == 0
    assert "watch" in ran.stdout
    measured = subprocess.run(
        [str(binaries / "crestwatch"), "watch", "sim:clean", "--plain", "--for", "1s"],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert measured.returncode == 0, measured.stderr
    assert "true RMS" in measured.stdout
