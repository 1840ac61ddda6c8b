"""Which line a table or a key of a TOML text stands on (the parser of the standard library does not say)."""

from __future__ import annotations

import re
from dataclasses import dataclass, field

_HEADER = re.compile(r"^\s*(\[\[?)\s*([^\]]+?)\s*\]\]?\s*(#.*)?$")
_KEY = re.compile(r"""^\s*("[^"]*"|'[^']*'|[A-Za-z0-9_.-]+)\s*=""")


@dataclass
class Lines:
    """Lines of tables and keys; an array of tables is counted from 0.

    `tables` maps ("element", 2) or ("medium.oil", 0) to its line, `keys` the same with the key's name.
    """

    tables: dict[tuple[str, int], int] = field(default_factory=dict)
    keys: dict[tuple[str, int, str], int] = field(default_factory=dict)

    def table(self, name: str, number: int = 0) -> int:
        """Line of a table (1 where it is not found)."""
        return self.tables.get((name, number), 1)

    def key(self, name: str, number: int, key: str) -> int:
        """Line of a key, or of its table."""
        return self.keys.get((name, number, key), self.table(name, number))


def find_lines(text: str) -> Lines:
    """Scan a TOML text once; strings and arrays over several lines are followed."""
    out = Lines()
    current, number = "", 0
    seen: dict[str, int] = {}
    depth, fence = 0, ""
    for place, line in enumerate(text.splitlines(), start=1):
        if not fence and depth <= 0:
            header = _HEADER.match(line)
            key = _KEY.match(line)
            if header and not key:
                current = ".".join(part.strip().strip("\"'") for part in header.group(2).split("."))
                if header.group(1) == "[[":
                    number = seen.get(current, -1) + 1
                    seen[current] = number
                else:
                    number = 0
                out.tables.setdefault((current, number), place)
                continue
            if key:
                name = key.group(1).strip("\"'")
                out.keys.setdefault((current, number, name), place)
                for part in _inline_keys(line[key.end() :]):
                    out.keys.setdefault((current, number, f"{name}.{part}"), place)
        depth, fence = _after(line, depth, fence)
    return out


def _inline_keys(text: str) -> list[str]:
    """Keys of an inline table on the same line."""
    if not text.lstrip().startswith("{"):
        return []
    return [key.strip("\"'") for key in re.findall(r"""[{,]\s*("[^"]*"|'[^']*'|[A-Za-z0-9_-]+)\s*=""", text)]


def _after(line: str, depth: int, fence: str) -> tuple[int, str]:
    """Depth of brackets and the open multi-line quote after a line."""
    k = 0
    while k < len(line):
        three = line[k : k + 3]
        if fence:
            if three == fence:
                fence, k = "", k + 3
            else:
                k += 2 if fence == '"""' and line[k] == "\\" else 1
            continue
        sign = line[k]
        if three in ('"""', "'''"):
            fence, k = three, k + 3
        elif sign in "\"'":
            end = k + 1
            while end < len(line) and line[end] != sign:
                end += 2 if sign == '"' and line[end] == "\\" else 1
            k = end + 1
        elif sign == "#":
            break
        else:
            depth += (sign in "[{") - (sign in "]}")
            k += 1
    return depth, fence
