"""The lines of a text log, found once, decoded one by one."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.records.source import LINE_LIMIT, Source

Whole = NDArray[np.int64]
COMMENTS = ("#", "%", "//", "!")


class Lines:
    """Where each line of a source begins and ends (without its line end); numbered from 0."""

    def __init__(self, source: Source) -> None:
        self.source = source
        self.signs = np.frombuffer(source.text, dtype=np.uint8)
        ends = np.flatnonzero(self.signs == 10)
        if self.signs[-1] != 10:
            ends = np.append(ends, self.signs.size)
        self.ends: Whole = ends
        self.begins: Whole = np.concatenate([[0], ends[:-1] + 1])
        long = self.ends - self.begins
        if int(long.max()) > LINE_LIMIT:
            row = int(np.argmax(long))
            raise LogError(
                f"the line has {int(long[row])} characters",
                where=f"{source.name}, line {row + 1}",
                do=f"a log's line has at most {LINE_LIMIT}",
                code="line-too-long",
            )

    def __len__(self) -> int:
        return int(self.ends.size)

    def __getitem__(self, row: int) -> str:
        piece = bytes(self.source.text[int(self.begins[row]) : int(self.ends[row])])
        return piece.decode("utf-8", "replace").rstrip("\r")

    def of(self, positions: Whole) -> Whole:
        """Line numbers of byte positions."""
        return np.searchsorted(self.ends, positions)

    def where(self, row: int) -> str:
        """For messages: file and line."""
        return f"{self.source.name}, line {row + 1}"

    def blank(self, row: int) -> bool:
        """Nothing but blanks (and separators)."""
        return not self[row].strip(" \t;,|\r")

    def comment(self, row: int) -> bool:
        """Marked as a comment."""
        return self[row].lstrip().startswith(COMMENTS)


def spread(rows: Iterable[int] | Whole, most: int) -> list[int]:
    """At most so many of the rows, evenly."""
    rows = np.unique(np.fromiter(rows, dtype=np.int64))
    if rows.size > most:
        rows = rows[np.linspace(0, rows.size - 1, most).astype(np.int64)]
    return [int(row) for row in rows]
