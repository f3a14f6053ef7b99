"""The line scanner against the standard library's parser."""

from __future__ import annotations

import tomllib
from typing import Any

from hypothesis import given
from hypothesis import strategies as st

from likelihoods.locations import Locations, line_numbers

TEXT = '''\
title = "x"  # comment with ] and "
a.b = 1
list = [ 1, # ] one
  [2,
   3], "]#", {k = 1, "q.r" = [4]},
]
long = """
many
\\"""
lines"""
literal = \'\'\'
it's\'\'\'\'
[[m]]
id = 'a#b'
  [m.sub]
  x = 1979-05-27 07:32:00
[[m]]
id = "b\\"]"
[m."errors x"]
y = 2
[[m.inner]]
[[m.inner]]
z = -1e-3
[p.q]
[p]
w = 0x1F
'''


def paths(value: Any, path: tuple[str | int, ...] = ()) -> set[tuple[str | int, ...]]:
    """All paths of a decoded document."""
    found = {path}
    if isinstance(value, dict):
        for key, item in value.items():
            found |= paths(item, (*path, key))
    elif isinstance(value, list):
        for index, item in enumerate(value):
            found |= paths(item, (*path, index))
    return found


def test_same_paths_as_the_parser() -> None:
    assert set(line_numbers(TEXT)) == paths(tomllib.loads(TEXT))


def test_lines() -> None:
    lines = line_numbers(TEXT)
    at = TEXT.split("\n")
    for path, start in {
        ("title",): "title",
        ("a", "b"): "a.b",
        ("list", 0): "list",
        ("list", 1, 1): "   3]",
        ("list", 3, "q.r", 0): "   3]",
        ("long",): "long",
        ("literal",): "literal",
        ("m", 0): "[[m]]",
        ("m", 0, "sub", "x"): "  x",
        ("m", 1, "id"): 'id = "b',
        ("m", 1, "errors x"): '[m."errors x"]',
        ("m", 1, "inner", 1, "z"): "z",
        ("p",): "[p]",
        ("p", "q"): "[p.q]",
        ("p", "w"): "w",
    }.items():
        assert at[lines[path] - 1].startswith(start), path
    assert lines["m", 1, "inner", 1] == lines["m", 1, "inner", 0] + 1


def test_windows_line_ends() -> None:
    assert line_numbers(TEXT.replace("\n", "\r\n")) == line_numbers(TEXT)


def test_missing_paths_fall_back() -> None:
    locations = Locations(TEXT)
    assert locations.line(("m", 1, "absent", 3)) == locations.line(("m", 1))
    assert locations.line(("absent",)) == 1


# Random documents, written by a writer that notes the line of everything it writes.

keys = st.one_of(
    st.text("abcXYZ019_-", min_size=1, max_size=4),
    st.text(st.characters(codec="utf-8", exclude_categories=["C"]), max_size=4),
)
texts = st.text(st.characters(codec="utf-8", exclude_categories=["C"]) | st.just("\n"), max_size=8)
scalars = st.one_of(
    st.integers(-99, 99), st.booleans(), st.floats(allow_nan=False, allow_infinity=False), texts
)
values = st.recursive(
    scalars,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(keys, inner, max_size=3),
    max_leaves=6,
)
comments = st.sampled_from(["", "  # plain", " # with ] } \" ' = ,"])


class Writer:
    """Writes TOML in random spellings."""

    def __init__(self, draw: Any) -> None:
        self.draw = draw
        self.text = ""
        self.lines: dict[tuple[str | int, ...], int] = {(): 1}

    @property
    def line(self) -> int:
        return self.text.count("\n") + 1

    def key(self, name: str) -> str:
        if name and set(name) <= set("abcXYZ019_-") and self.draw(st.booleans()):
            return name
        if "'" not in name and self.draw(st.booleans()):
            return f"'{name}'"
        return self.basic(name)

    def basic(self, text: str) -> str:
        return '"' + text.replace("\\", "\\\\").replace('"', '\\"').replace("\n", "\\n") + '"'

    def put(self, path: tuple[str | int, ...], value: Any, may_break: bool) -> None:
        """Write a value; inside inline tables of this version of the format no line may end."""
        if isinstance(value, str):
            if may_break and self.draw(st.booleans()):
                # The format drops a line end right after the opening quotes.
                self.text += (
                    '"""'
                    + "\n" * value.startswith("\n")
                    + value.replace("\\", "\\\\").replace('"', '\\"')
                    + '"""'
                )
            else:
                self.text += self.basic(value)
        elif isinstance(value, bool):
            self.text += str(value).lower()
        elif isinstance(value, list):
            self.text += "["
            for index, item in enumerate(value):
                if may_break and self.draw(st.booleans()):
                    self.text += self.draw(comments) + "\n "
                self.lines[*path, index] = self.line
                self.put((*path, index), item, may_break)
                self.text += ", "
            self.text += "]"
        elif isinstance(value, dict):
            self.text += "{"
            for number, (name, item) in enumerate(value.items()):
                self.text += ", " if number else " "
                self.lines[*path, name] = self.line
                self.text += self.key(name) + " = "
                self.put((*path, name), item, False)
            self.text += "}"
        else:
            self.text += repr(value)

    def pair(self, path: tuple[str | int, ...], name: str, value: Any) -> None:
        self.lines[*path, name] = self.line
        self.text += self.key(name) + self.draw(st.sampled_from([" = ", "=", "  =\t"]))
        self.put((*path, name), value, True)
        self.text += self.draw(comments) + "\n" * self.draw(st.integers(1, 3))

    def document(self, top: dict[str, Any], tables: dict[str, list[dict[str, Any]]]) -> None:
        for name, value in top.items():
            self.pair((), name, value)
        for name, items in tables.items():
            for index, table in enumerate(items):
                self.lines.setdefault((name,), self.line)
                self.lines[name, index] = self.line
                self.text += f"[[ {self.key(name)} ]]" + self.draw(comments) + "\n"
                for key, value in table.items():
                    self.pair((name, index), key, value)


@given(st.data())
def test_random_documents(data: st.DataObject) -> None:
    names = data.draw(st.lists(keys, max_size=5, unique=True))
    cut = data.draw(st.integers(0, len(names)))
    top = {name: data.draw(values) for name in names[:cut]}
    tables = {
        name: data.draw(st.lists(st.dictionaries(keys, values, max_size=3), min_size=1, max_size=3))
        for name in names[cut:]
    }
    writer = Writer(data.draw)
    writer.document(top, tables)
    assert tomllib.loads(writer.text) == {**top, **tables}
    lines = line_numbers(writer.text)
    assert set(lines) == paths(tomllib.loads(writer.text))
    assert lines == writer.lines
