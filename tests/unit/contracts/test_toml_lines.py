import tomllib
from pathlib import Path
from typing import Any

import pytest

from keelbook.contracts.toml_lines import lines_of
from keelbook.locate import folder

TRICKY = '''# a comment with [brackets] and "quotes"
title = "a # that is no comment"
"quoted key" = 1
dotted.inner.deep = true

[table]          # header
text = """
several
lines with \\""" inside
"""
literal = \'\'\'
x = 1
\'\'\'
after = 2
list = [
    1,     # one
    [2, 3],
    { a = 1, b = "x,]}" },
]
inline = { one = 1, two = { three = 3 } }
when = 1979-05-27 07:32:00
last_of_quotes = """ends with a quote""""

[[source]]
name = "first"
[source.csv]
delimiter = ";"
[source.codes."a.b"]
"ä \\u00e9" = "C"
[[source]]
name = "second"
  [[source.part]]
  x = 1
  [[source.part]]
  x = 2
'''

EXPECTED = {
    ("title",): 2,
    ("quoted key",): 3,
    ("dotted",): 4,
    ("dotted", "inner", "deep"): 4,
    ("table",): 6,
    ("table", "text"): 7,
    ("table", "literal"): 11,
    ("table", "after"): 14,
    ("table", "list"): 15,
    ("table", "list", 0): 16,
    ("table", "list", 1): 17,
    ("table", "list", 1, 1): 17,
    ("table", "list", 2, "b"): 18,
    ("table", "inline", "two", "three"): 20,
    ("table", "when"): 21,
    ("table", "last_of_quotes"): 22,
    ("source",): 24,
    ("source", 0): 24,
    ("source", 0, "name"): 25,
    ("source", 0, "csv"): 26,
    ("source", 0, "csv", "delimiter"): 27,
    ("source", 0, "codes", "a.b", "ä é"): 29,
    ("source", 1): 30,
    ("source", 1, "part", 0, "x"): 33,
    ("source", 1, "part", 1): 34,
    ("source", 1, "part", 1, "x"): 35,
}


def paths(data: Any, here: tuple[str | int, ...] = ()) -> list[tuple[str | int, ...]]:
    items = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    return [found for key, value in items for found in ((*here, key), *paths(value, (*here, key)))]


@pytest.mark.parametrize(("path", "line"), EXPECTED.items(), ids=str)
def test_line_of_each_key(path: tuple[str | int, ...], line: int) -> None:
    assert lines_of(TRICKY)[path] == line


def test_windows_line_ends_count_once() -> None:
    assert lines_of(TRICKY.replace("\n", "\r\n")) == lines_of(TRICKY)


def test_every_key_of_the_tricky_text_has_a_line_and_none_is_invented() -> None:
    assert set(lines_of(TRICKY)) == set(paths(tomllib.loads(TRICKY)))


@pytest.mark.parametrize(
    "file", sorted([*folder("rules").glob("*.toml"), *folder("schemas").glob("*.toml")]), ids=lambda p: p.name
)
def test_keys_of_shipped_files_stand_on_their_lines(file: Path) -> None:
    text = file.read_text(encoding="utf-8")
    lines = text.splitlines()
    found = lines_of(text)
    assert set(found) == set(paths(tomllib.loads(text)))
    for path, line in found.items():
        named = [part for part in path if isinstance(part, str)]
        if isinstance(path[-1], str):
            assert named[-1] in lines[line - 1], (path, line)
