"""Where a table, a key and its value stand in a TOML text (the parser of the standard library does not say)."""

from __future__ import annotations

import re
from bisect import bisect_right
from collections.abc import Callable
from dataclasses import dataclass, field

_BLANK = re.compile(r"(?:[ \t\r\n]|#[^\n]*)*")
_SPACE = re.compile(r"[ \t]*")
_BARE = re.compile(r"[A-Za-z0-9_-]+")
_SCALAR = re.compile(r"[^,\]}#\r\n]*")

Path = tuple[str | int, ...]
Place = tuple[str, int, str]


@dataclass
class Lines:
    """Lines of tables and keys; an array of tables is counted from 0.

    `tables` maps ("element", 2) or ("medium.oil", 0) to its line, `keys` the same with the key's name, and
    `values` to where the value stands in the text (begin, end). A key of a table in a table is found under
    either: ("log", 0, "units.p_line") and ("log.units", 0, "p_line").
    """

    tables: dict[tuple[str, int], int] = field(default_factory=dict)
    keys: dict[Place, int] = field(default_factory=dict)
    values: dict[Place, tuple[int, int]] = field(default_factory=dict)

    def table(self, name: str, number: int = 0) -> int:
        """Line of a table, or of the table that holds it (1 where neither is found)."""
        while name:
            if (name, number) in self.tables:
                return self.tables[name, number]
            name, number = name.rpartition(".")[0], 0
        return 1

    def key(self, name: str, number: int, key: str) -> int:
        """Line of a key, or of its table."""
        return self.keys.get((name, number, key), self.table(name, number))


def find_lines(text: str) -> Lines:
    """Scan a text once that the TOML parser has accepted."""
    scan = _Scan(text)
    scan.document()
    return scan.out


class _Scan:
    """A walk over valid TOML: every key's path, its line, and the place of its value."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.out = Lines()
        self.breaks = [k for k, sign in enumerate(text) if sign == "\n"]
        self.count: dict[str, int] = {}

    def document(self) -> None:
        """The whole text."""
        table: Path = ()
        while True:
            self._skip(_BLANK)
            if self.at >= len(self.text):
                return
            begin = self.at
            if self.text[begin] == "[":
                many = self.text.startswith("[[", begin)
                self.at += 2 if many else 1
                table = self._placed(self._names(), many)
                self._note_table(table, begin)
                end = self.text.find("\n", self.at)
                self.at = len(self.text) if end < 0 else end
            else:
                self._pair(table)
            if self.at == begin:
                return

    def _placed(self, names: list[str], many: bool) -> Path:
        """The path of a header, with the number of each array of tables on the way."""
        path: list[str | int] = []
        for depth, name in enumerate(names, start=1):
            path.append(name)
            whole = ".".join(names[:depth])
            if many and depth == len(names):
                self.count[whole] = self.count.get(whole, -1) + 1
            if whole in self.count:
                path.append(self.count[whole])
        return tuple(path)

    def _pair(self, table: Path) -> None:
        begin = self.at
        path = (*table, *self._names())
        self._skip(_SPACE)
        self.at += 1  # the sign =
        self._skip(_SPACE)
        start = self.at
        self._value(path)
        self._note_key(path, begin, (start, self.at))

    def _names(self) -> list[str]:
        """A key, dotted or not, in bare words or quotes."""
        names: list[str] = []
        while self.at < len(self.text):
            self._skip(_SPACE)
            begin = self.at
            if self.text[begin : begin + 1] in ('"', "'"):
                self._string()
                names.append(self.text[begin + 1 : self.at - 1])
            else:
                self._skip(_BARE)
                names.append(self.text[begin : self.at])
            self._skip(_SPACE)
            if self.text[self.at : self.at + 1] != ".":
                break
            self.at += 1
        return names

    def _value(self, path: Path) -> None:
        sign = self.text[self.at : self.at + 1]
        if sign in ('"', "'"):
            self._string()
        elif sign == "[":
            self._items("]", lambda number: self._value((*path, number)))
        elif sign == "{":
            self._note_table(path, self.at)
            self._items("}", lambda number: self._pair(path))
        else:
            begin = self.at
            self._skip(_SCALAR)
            self.at = begin + len(self.text[begin : self.at].rstrip())

    def _items(self, closing: str, one: Callable[[int], None]) -> None:
        self.at += 1
        number = 0
        while self.at < len(self.text):
            self._skip(_BLANK)
            if self.text[self.at : self.at + 1] == closing:
                self.at += 1
                return
            if self.text[self.at : self.at + 1] == ",":
                self.at += 1
                continue
            one(number)
            number += 1

    def _string(self) -> None:
        """Over one string of any of the four kinds."""
        quote = self.text[self.at]
        fence = quote * 3 if self.text.startswith(quote * 3, self.at) else quote
        self.at += len(fence)
        while self.at < len(self.text) and not self.text.startswith(fence, self.at):
            self.at += 2 if quote == '"' and self.text[self.at] == "\\" else 1
        self.at += len(fence)
        while len(fence) == 3 and self.text[self.at : self.at + 1] == quote:
            self.at += 1  # up to two quotes may stand before the closing three

    def _skip(self, pattern: re.Pattern[str]) -> None:
        found = pattern.match(self.text, self.at)
        if found:
            self.at = found.end()

    def _line(self, at: int) -> int:
        return bisect_right(self.breaks, at - 1) + 1

    def _note_table(self, path: Path, at: int) -> None:
        number = next((part for part in path if isinstance(part, int)), 0)
        name = ".".join(part for part in path if isinstance(part, str))
        self.out.tables.setdefault((name, number), self._line(at))
        self._note_key(path, at, None)

    def _note_key(self, path: Path, at: int, value: tuple[int, int] | None) -> None:
        """A key under every table that it may be looked for in; tables on its way without a header too."""
        number, index = 0, 0
        names: list[str] = []
        for part in path:
            if isinstance(part, int):
                number, index = part, len(names)
            else:
                names.append(part)
        for cut in range(1, len(names)):
            table, key = ".".join(names[:cut]), ".".join(names[cut:])
            count = number if cut >= index else 0
            self.out.tables.setdefault((table, count), self._line(at))
            self.out.keys.setdefault((table, count, key), self._line(at))
            if value is not None:
                self.out.values.setdefault((table, count, key), value)
        if len(names) == 1:
            self.out.tables.setdefault((names[0], number), self._line(at))
