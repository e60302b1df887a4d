"""Where each key of a TOML text stands. `tomllib` parses; this only locates."""

import re

Path = tuple[str | int, ...]

_BARE = re.compile(r"[A-Za-z0-9_-]+")
_SCALAR = re.compile(r"[^\s,\]}#]+")
_QUOTES = ('"""', "'''", '"', "'")
_ESCAPE = re.compile(r"\\(u[0-9A-Fa-f]{4}|U[0-9A-Fa-f]{8}|.)", re.DOTALL)
_ESCAPED = {"b": "\b", "t": "\t", "n": "\n", "f": "\f", "r": "\r", '"': '"', "\\": "\\"}


def lines_of(text: str) -> dict[Path, int]:
    """Return key path -> line (from 1) of every table, key and array element of a valid TOML text.

    A table opened by a header has the header's line; a key, also inside an inline table, the line of its
    name; an array element the line it starts on. Arrays of tables are indexed from 0. A table opened
    more than once (`[a.b]`, then `[a]`) keeps the first line.

    Args:
        text: a text that `tomllib` accepts; anything else gives no sensible answer.
    """
    return _Scan(text).run()


class _Scan:
    def __init__(self, text: str) -> None:
        self.text = text.replace("\r\n", "\n")
        self.at = 0
        self.line = 1
        self.found: dict[Path, int] = {}
        self.tables: dict[Path, int] = {}

    def run(self) -> dict[Path, int]:
        table: Path = ()
        self.skip(newlines=True)
        while self.at < len(self.text):
            if self.text[self.at] == "[":
                table = self.header()
            else:
                self.pair(table)
            self.skip(newlines=True)
        return self.found

    def move(self, to: int) -> None:
        self.line += self.text.count("\n", self.at, to)
        self.at = to

    def skip(self, *, newlines: bool) -> None:
        blank = " \t\n" if newlines else " \t"
        while self.at < len(self.text):
            if self.text[self.at] in blank:
                self.move(self.at + 1)
            elif newlines and self.text[self.at] == "#":
                end = self.text.find("\n", self.at)
                self.move(len(self.text) if end < 0 else end)
            else:
                return

    def header(self) -> Path:
        array = self.text.startswith("[[", self.at)
        line = self.line
        self.move(self.at + (2 if array else 1))
        path: Path = ()
        keys = self.keys()
        for depth, key in enumerate(keys):
            path = (*path, key)
            self.found.setdefault(path, line)
            if array and depth == len(keys) - 1:
                self.tables[path] = self.tables.get(path, -1) + 1
            if path in self.tables:
                path = (*path, self.tables[path])
                self.found.setdefault(path, line)
        self.move(self.at + (2 if array else 1))
        return path

    def pair(self, table: Path) -> None:
        line = self.line
        path = table
        for key in self.keys():
            path = (*path, key)
            self.found.setdefault(path, line)
        self.move(self.at + 1)
        self.skip(newlines=False)
        self.value(path)

    def keys(self) -> list[str]:
        keys = []
        while True:
            self.skip(newlines=False)
            if self.text[self.at] in "\"'":
                keys.append(self.string())
            else:
                bare = _BARE.match(self.text, self.at)
                if bare is None:
                    raise ValueError(f"line {self.line}: not a TOML key")
                keys.append(bare.group())
                self.move(bare.end())
            self.skip(newlines=False)
            if self.text[self.at] != ".":
                return keys
            self.move(self.at + 1)

    def string(self) -> str:
        mark = next(mark for mark in _QUOTES if self.text.startswith(mark, self.at))
        end = self.at + len(mark)
        while not self.text.startswith(mark, end):
            end += 2 if mark[0] == '"' and self.text[end] == "\\" else 1
        while len(mark) == 3 and self.text.startswith(mark, end + 1):
            end += 1
        inner = self.text[self.at + len(mark) : end]
        self.move(end + len(mark))
        return _ESCAPE.sub(_unescape, inner) if mark[0] == '"' else inner

    def value(self, path: Path) -> None:
        char = self.text[self.at]
        if char in "\"'":
            self.string()
        elif char == "[":
            self.array(path)
        elif char == "{":
            self.inline(path)
        else:
            scalar = _SCALAR.match(self.text, self.at)
            if scalar is None:
                raise ValueError(f"line {self.line}: not a TOML value")
            self.move(scalar.end())
            self.date_time()

    def date_time(self) -> None:
        """A date and a time may be parted by one space."""
        rest = re.compile(r" \d\d:\d\d\S*").match(self.text, self.at)
        if rest is not None:
            self.move(rest.end())

    def array(self, path: Path) -> None:
        self.move(self.at + 1)
        count = 0
        while True:
            self.skip(newlines=True)
            if self.text[self.at] == ",":
                self.move(self.at + 1)
            elif self.text[self.at] == "]":
                self.move(self.at + 1)
                return
            else:
                self.found[(*path, count)] = self.line
                self.value((*path, count))
                count += 1

    def inline(self, path: Path) -> None:
        self.move(self.at + 1)
        while True:
            self.skip(newlines=True)
            if self.text[self.at] == ",":
                self.move(self.at + 1)
            elif self.text[self.at] == "}":
                self.move(self.at + 1)
                return
            else:
                self.pair(path)


def _unescape(match: re.Match[str]) -> str:
    escape = match.group(1)
    return chr(int(escape[1:], 16)) if escape[0] in "uU" and len(escape) > 1 else _ESCAPED.get(escape, escape)
