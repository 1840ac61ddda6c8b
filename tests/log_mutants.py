"""Damaged copies of a log that know which cells were touched, and the check that no other cell moved."""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from log_forms import ROWS, LogForm, record
from rigtally.records.record import Record

TRUTH = np.array(record())
NAMES = ("p", "n", "T")
# marks, letters and words that damage a cell
_BITS = (
    ".", ",", ";", "\t", " ", '"', "'", "-", "+", "e", "E", "x", "0", "7", "9", "ERR", "NaN", "", "1e9",
    "#", "\u00a0", "\r", "\n", "1,234", "1.234", "1.234,5", "12:00", "\u2212", "inf", "--", "99999999999",
    "/", "µ", "\\", "|", "\x07", "\udcff", "\udc80", "0x10", "1e400", "=A1", "(3)", "5 kPa", "1 234",
    "01.02.2024", "1_000",
)  # fmt: skip
_WAYS = (
    "edit",
    "insert",
    "drop",
    "replace",
    "join",
    "lose",
    "double",
    "blank",
    "comment",
    "note",
    "footer",
    "cut",
)
_OFTEN = (0.2, 0.14, 0.12, 0.2, 0.03, 0.05, 0.04, 0.06, 0.04, 0.05, 0.04, 0.03)


@dataclass(frozen=True)
class Mutant:
    """A damaged file.

    Attributes
    ----------
    content : bytes
    whole : (rows, 4) array of bool
        False where the cell (column 0 is the time) was touched.
    how : str
        What was done, for a person.
    """

    content: bytes
    whole: NDArray[np.bool_]
    how: str


class _Sheet:
    """The log's lines, cell by cell, while it is damaged."""

    def __init__(self, form: LogForm) -> None:
        self.form = replace(form, encoding="utf-8")
        lines = self.form.text().rstrip("\r\n").split(self.form.ends)
        self.head = lines[:-ROWS]
        self.rows = [_cells(form, line) for line in lines[-ROWS:]]
        self.above: dict[int, list[str]] = defaultdict(list)
        self.below: list[str] = []
        self.whole = np.ones((ROWS, 4), dtype=bool)
        self.lost: set[int] = set()
        self.cut = 0.0

    def touch(self, row: int, cell: int) -> None:
        # a date and a time of day are both the time
        self.whole[row, max(cell - (len(self.rows[row]) - 4), 0)] = False

    def damage(self, way: str, bit: str, rng: np.random.Generator) -> str:
        # the first and the last rows stand beside what is no row; the first stamp is the origin of dates
        edge = rng.random() < 0.2
        row = int(rng.choice([0, 1, ROWS - 2, ROWS - 1])) if edge else int(rng.integers(1, ROWS))
        if row == 0 and way in ("lose", "join"):
            row = 1
        line = self.rows[row]
        cell = int(rng.integers(len(line) - 3 if row == 0 else 0, len(line)))
        before = line[cell]
        at = int(rng.integers(len(before) + 1))
        if way in ("edit", "insert", "drop"):
            end = at if way == "insert" else at + 1
            line[cell] = before[:at] + ("" if way == "drop" else bit) + before[end:]
        elif way == "replace":
            line[cell] = bit
        elif way == "join" and cell + 1 < len(line) == len(self.rows[0]):
            self.touch(row, cell)
            self.touch(row, cell + 1)
            line[cell : cell + 2] = [before + line[cell + 1]]
            self.whole[row, 0] &= cell > len(self.rows[0]) - 4
            return f"row {row}: cells {cell} and {cell + 1} joined"
        elif way == "lose":
            self.lost.add(row)
            self.whole[row] = False
        elif way == "double":
            self.above[row].append(self.form.separator.join(line))
        elif way == "blank":
            self.above[row].append(str(rng.choice(["", "  ", self.form.separator * 2])))
        elif way == "comment":
            self.above[row].append(f"# mark {bit}".replace("\n", "").replace("\r", ""))
        elif way == "note":
            self.head.insert(0, f"Note {bit.strip()}: {bit}")
        elif way == "footer":
            self.below.append(f"End of log {bit}")
        elif way == "cut":
            self.cut = float(rng.uniform(0.5, 1.0))
        if line[cell] != before:
            self.touch(row, cell)
        return f"{way} row {row} cell {cell} {before!r} {bit!r}"

    def mutant(self, how: str) -> Mutant:
        lines: list[str] = list(self.head)
        first: dict[int, int] = {}
        for row, line in enumerate(self.rows):
            lines.extend(self.above[row])
            first[row] = len(lines)
            if row not in self.lost:
                lines.append(self.form.separator.join(line))
        text = self.form.ends.join([*lines, *self.below]) + self.form.ends
        if self.cut:
            text = text[: int(self.cut * len(text))]
            kept = text.count(self.form.ends) - sum(line.count(self.form.ends) for line in lines)
            whole = min(kept, len(lines))
            for row, place in first.items():
                if place >= whole - 1:
                    self.whole[row] = False
        return Mutant(text.encode("utf-8", "surrogateescape"), self.whole, how)


def mutant(form: LogForm, rng: np.random.Generator) -> Mutant:
    """One to three damages drawn at random."""
    sheet = _Sheet(form)
    how = []
    for _ in range(int(rng.integers(1, 4))):
        way = str(rng.choice(_WAYS, p=_OFTEN))
        how.append(sheet.damage(way, _BITS[int(rng.integers(len(_BITS)))], rng))
    return sheet.mutant("; ".join(how))


def _cells(form: LogForm, line: str) -> list[str]:
    if form.quoted:
        return [f'"{cell}"' for cell in line.strip('"').split(f'"{form.separator}"')]
    return line.split(form.separator)


def moved(damaged: Mutant, found: Record) -> str | None:
    """What differs in a cell that was not touched, by value, row or channel; None if nothing does.

    A row is known by its time: rows whose time was touched are not asked after.
    """
    if found.names != NAMES:
        return f"channels {found.names}"
    time = found.time
    for column, name in enumerate(NAMES, start=1):
        channel = found.channel(name)
        rows = np.flatnonzero(damaged.whole[:, column] & damaged.whole[:, 0])
        after = np.clip(np.searchsorted(time, TRUTH[rows, 0]), 1, time.size - 1)
        near = np.where(time[after] - TRUTH[rows, 0] < TRUTH[rows, 0] - time[after - 1], after, after - 1)
        gone = np.abs(time[near] - TRUTH[rows, 0]) > 0.005
        if gone.any():
            return f"row {rows[gone][0]} is gone"
        wanted = TRUTH[rows, column] * channel.factor + channel.offset
        wrong = channel.samples[near] != wanted
        # two rows of one stamp that differ are both left out, and named
        if any(fault.kind == "doubled" for fault in found.clock_faults):
            wrong &= ~np.isnan(channel.samples[near])
        if wrong.any():
            row = int(np.flatnonzero(wrong)[0])
            return f"row {rows[row]} {name}: {channel.samples[near][row]!r} instead of {wanted[row]!r}"
    return None
