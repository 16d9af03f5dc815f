"""Lines of keys: checked on texts whose lines are known as they are written."""

import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rig.key_lines import key_lines

# Features of TOML 1.0 (from memory, not read); each text with some paths and their lines.
TEXTS = {
    "keys, comments and blank lines": (
        "# a = 1\n\na = 1 # b = 2\n  b = 'x' \n", {("a",): 3, ("b",): 4},
    ),
    "strings that look like structure": (
        'a = "[[t]] # = \\" x"\nb = \'[c] \\\'\nc = 1\n', {("a",): 1, ("b",): 2, ("c",): 3},
    ),
    "long strings with quotes at their end": (
        'a = """\nx = 1\n"" y\\""""""\nb = \'\'\'\n[t]\n\'\'\'\'\'\nc = 1\n',
        {("a",): 1, ("b",): 4, ("c",): 7},
    ),
    "tables in lists": (
        "[[t]]\na = 1\n[[t]]\nb = 1\n[t.u]\nc = 1\n[[t.v]]\n[[t.v]]\nd = 1\n",
        {("t",): 1, ("t", 0): 1, ("t", 0, "a"): 2, ("t", 1): 3, ("t", 1, "b"): 4,
         ("t", 1, "u"): 5, ("t", 1, "u", "c"): 6, ("t", 1, "v", 1): 8, ("t", 1, "v", 1, "d"): 9},
    ),
    "dotted and quoted keys": (
        'a.b . "c d" = 1\n"e\\u0041" = 2\n[x."y.z"]\nf = 1\n',
        {("a",): 1, ("a", "b", "c d"): 1, ("eA",): 2, ("x", "y.z"): 3, ("x", "y.z", "f"): 4},
    ),
    "lists and tables over several lines": (
        "a = [ # one\n  1, [2,\n 3],\n  {b = 4, c = [\n5]},\n]\nd = 1979-05-27T07:32:00Z\ne = 1\n",
        {("a", 0): 2, ("a", 1): 2, ("a", 1, 1): 3, ("a", 2, "b"): 4, ("a", 2, "c", 0): 5,
         ("d",): 7, ("e",): 8},
    ),
}  # fmt: skip


@pytest.mark.parametrize("sentence", TEXTS)
def test_lines_are_those_counted_by_hand(sentence):
    text, expected = TEXTS[sentence]
    tomllib.loads(text)  # the walk takes only what the reader accepts
    lines = key_lines(text)
    assert {path: lines.get(path) for path in expected} == expected


@st.composite
def documents(draw):
    """A text of tables and the line of each of its paths, counted while it is written."""
    rows, lines = [], {}
    value = st.sampled_from(
        ("1", "-2.5e3", "true", '"x # ] = "', "'\\'", "[1, [2, 3]]", "{p = 1, q.r = [2]}", "inf",
         '"""\nz = 1 # \\""" x\n"""', "'''\n[[t]]'''", "[\n 1, # ]\n 2,\n]", "07:32:00"),
    )  # fmt: skip
    for n in range(draw(st.integers(0, 4))):
        rows.append(draw(st.sampled_from(("", "# [[t]]", "  "))))
        lines["t", n] = sum(row.count("\n") + 1 for row in rows) + 1
        rows.append(draw(st.sampled_from(("[[t]]", " [[ t ]] # x", '[["t"]]'))))
        for key in draw(st.lists(st.sampled_from("abcde"), unique=True)):
            lines["t", n, key] = sum(row.count("\n") + 1 for row in rows) + 1
            rows.append(f"{key} ={draw(st.sampled_from(('', ' ')))}{draw(value)}")
    return "\n".join(rows), lines


@settings(deadline=None, max_examples=200)
@given(documents())
def test_lines_are_those_counted_while_writing(document):
    text, expected = document
    tomllib.loads(text)
    lines = key_lines(text)
    assert {path: lines.get(path) for path in expected} == expected


@settings(deadline=None, max_examples=300)
@given(st.text(alphabet="ab=.[]{},\"' #\n1\\\r\t", max_size=60))
def test_whatever_the_reader_accepts_is_walked_and_every_key_has_a_line(text):
    text = text.replace("\r\n", "\n")
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        return
    lines = key_lines(text)
    for path in _paths(table, ()):
        assert 1 <= lines[path] <= text.count("\n") + 1


def _paths(value, path):
    if path:
        yield path
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from _paths(inner, (*path, key))
    elif isinstance(value, list):
        for n, inner in enumerate(value):
            yield from _paths(inner, (*path, n))
