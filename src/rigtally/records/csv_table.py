"""The rows of a text log in bulk, every line counted and every cell accounted for."""

from __future__ import annotations

import io
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.records.csv_cells import HIGH_COMMAS, MISSING, SPACES, kind, number_pattern, split
from rigtally.records.csv_layout import Layout
from rigtally.records.csv_lines import Lines
from rigtally.records.csv_rows import find_rows
from rigtally.records.record import Fault

Array = NDArray[np.float64]
Bool = NDArray[np.bool_]

# Unreadable cells beyond this share of a column are a misunderstanding, not damage.
DAMAGE = 0.02
_SPELLINGS = sorted(
    {form for word in MISSING for form in (word, word.upper(), word.capitalize())} | {"NaN", "#N/A"}
)


class Disagreement(Exception):
    """Cells that another reading of the marks would make numbers: the layout must be looked at again."""

    def __init__(self, rows: Sequence[int], cell: str, column: int) -> None:
        super().__init__(cell)
        self.rows = tuple(rows)
        self.cell = cell
        self.column = column


@dataclass(frozen=True)
class Table:
    """Columns as read: numbers, or texts of stamps; and what was found on the way.

    `lines` is the first and last line of rows (counted from 1).
    """

    numbers: dict[int, Array]
    texts: dict[int, Any]
    faults: dict[int, tuple[Fault, ...]]
    lines: tuple[int, int]
    footer: tuple[str, ...] = ()
    left_out: int = 0


def read_table(
    lines: Lines,
    layout: Layout,
    wanted: Sequence[int],
    missing: Sequence[str] = (),
    progress: Callable[[int, int], None] | None = None,
    *,
    weighed: bool = False,
) -> Table:
    """Read the wanted columns of all rows.

    `weighed` says that the layout was decided with these rows' own evidence.

    Raises
    ------
    LogError
        codes "ragged", "unreadable-cell", "quotes", "two-tables".
    Disagreement
        Where cells speak for another reading of the marks.
    """
    rows, last, footer = find_rows(lines, layout)
    numbers = [place for place in wanted if layout.kinds[place] in ("number", "missing")]
    texts = [place for place in wanted if layout.kinds[place] in ("stamp", "date", "clock")]
    body = _Body(lines, layout, rows, last, [*_SPELLINGS, *missing], progress)
    bad: dict[int, list[tuple[int, str]]] = {}
    frame = None
    if not layout.marks.thousands:
        try:
            frame = body.frame(numbers, texts, bad)
        except (ValueError, OverflowError):
            frame = None
    if frame is None:
        # look at every cell as a text, then read again without those that are no numbers
        bad = body.unreadable(numbers, weighed)
        try:
            frame = body.frame(numbers, texts, bad)
        except (ValueError, OverflowError) as fault:
            raise LogError(
                f"the rows cannot be read: {str(fault).strip()[:120]}",
                where=lines.source.name,
                do="mend the line or take it out",
                code="unreadable-cell",
            ) from None
    if len(frame) != rows.size:
        raise LogError(
            f"{rows.size} lines gave {len(frame)} rows",
            where=lines.source.name,
            do="look for quotes that are not closed",
            code="quotes",
        )
    out: dict[int, Array] = {}
    faults: dict[int, tuple[Fault, ...]] = {}
    for place in numbers:
        values = frame[place].to_numpy(dtype=float, copy=False)
        out[place], faults[place] = _accounted(values, bad.get(place, []))
    if layout.count - 1 in out and _cut_short(lines, layout, rows):
        values = out[layout.count - 1].copy()
        values[-1] = np.nan
        text = "the file ends within the last cell, which is left out"
        out[layout.count - 1] = values
        faults[layout.count - 1] += (Fault("cut", text, 1, (values.size - 1,)),)
    return Table(
        out,
        {place: frame[place] for place in texts},
        faults,
        (int(rows[0]) + 1, int(rows[-1]) + 1),
        footer,
        int(last - layout.first - rows.size),
    )


def _cut_short(lines: Lines, layout: Layout, rows: NDArray[np.int64]) -> bool:
    """No line end after the last row, and fewer decimals in its last cell than in the rows before."""
    if lines.signs[-1] in (10, 13) or int(rows[-1]) != len(lines) - 1 or rows.size < 4:
        return False
    cells = [split(lines[int(row)], layout.separator or ",")[-1] for row in rows[-20:]]
    places = [
        len(cell.rpartition(layout.marks.decimal)[2]) * (layout.marks.decimal in cell) for cell in cells
    ]
    return places[-1] < min(places[:-1])


def _accounted(values: Array, bad: list[tuple[int, str]]) -> tuple[Array, tuple[Fault, ...]]:
    """Name what is missing, what was no number, and what stands for an overload."""
    found: list[Fault] = []
    if bad:
        text = ", ".join(f"{cell!r}" for _, cell in bad[:3])
        rows = tuple(row for row, _ in bad[:8])
        found.append(
            Fault("unreadable", f"{len(bad)} cells are no numbers and are left out: {text}", len(bad), rows)
        )
    # ±9.9E37 and 9.91E37: infinity and not-a-number as instruments send them (IEEE Std 488.2)
    with np.errstate(invalid="ignore"):
        beyond = np.flatnonzero(np.abs(values) >= 9.9e37)
    if beyond.size:
        values = values.copy()
        values[beyond] = np.nan
        found.append(
            Fault(
                "overload",
                f"{beyond.size} cells stand for an overload and are left out",
                int(beyond.size),
                tuple(int(row) for row in beyond[:8]),
            )
        )
    gaps = np.flatnonzero(np.isnan(values))
    lost = int(gaps.size - beyond.size - len(bad))
    if lost > 0:
        found.append(
            Fault("missing", f"{lost} cells hold no value", lost, tuple(int(row) for row in gaps[:8]))
        )
    return values, tuple(found)


class _Body:
    """The rows' bytes, and how the bulk reader is told to read them."""

    def __init__(
        self,
        lines: Lines,
        layout: Layout,
        rows: NDArray[np.int64],
        last: int,
        missing: Sequence[str],
        progress: Callable[[int, int], None] | None,
    ) -> None:
        self.layout = layout
        self.rows = rows
        self.lines = lines
        self.missing = list(dict.fromkeys(missing))
        self.progress = progress
        end = int(lines.ends[rows[-1]])
        text = lines.source.text[int(lines.begins[layout.first]) : end]
        if rows.size != int(rows[-1]) - layout.first + 1:
            view = lines.source.text
            text = memoryview(
                b"\n".join(bytes(view[int(lines.begins[row]) : int(lines.ends[row])]) for row in rows)
            )
        marks = layout.marks
        if marks.thousands in (" ", "'"):
            plain = bytes(text)
            for mark in {" ": SPACES[1:], "'": HIGH_COMMAS[1:]}[marks.thousands]:
                plain = plain.replace(mark.encode(), marks.thousands.encode())
            text = memoryview(plain)
        self.text = text
        begin = int(lines.begins[layout.first])
        self.quoted = bool((np.frombuffer(text, dtype=np.uint8) == 34).any())
        self.on_disk = (
            lines.source.on_disk
            and marks.thousands not in (" ", "'")
            and progress is None
            and len(text) + begin + 2 >= len(lines.source.text)
            and rows.size == len(lines) - layout.first
            and not self.quoted
            and not (lines.signs[:begin] == 34).any()
        )

    def _read(self, columns: Sequence[int], dtype: Any, missing: Any, **more: Any) -> Any:
        import pandas as pd

        separator = self.layout.separator
        every = len(columns) == self.layout.count
        return pd.read_csv(
            self._origin(),
            sep=r"\s+" if separator == " " else (separator if self.layout.count > 1 else "\x01"),
            header=None,
            names=list(range(self.layout.count)),
            usecols=None if every else sorted(columns),
            skiprows=self.layout.first if self.on_disk else None,
            dtype=dtype,
            na_values=missing,
            keep_default_na=False,
            skipinitialspace=self.quoted,
            skip_blank_lines=False,
            index_col=False,
            engine="c",
            encoding="utf-8",
            **more,
        )

    def _origin(self) -> Any:
        """The file itself where its rows are all that is in it, which is faster than from memory."""
        if self.on_disk:
            return self.lines.source.name
        return io.BufferedReader(_Stream(self.text, self.progress), 1 << 18)

    def frame(
        self, numbers: Sequence[int], texts: Sequence[int], bad: dict[int, list[tuple[int, str]]]
    ) -> Any:
        """Numbers as float64 (ValueError where a cell is none), stamps as texts."""
        dtype: dict[int, Any] = dict.fromkeys(numbers, np.float64) | dict.fromkeys(texts, str)
        missing: Any = self.missing
        if bad:
            missing = {
                place: self.missing + sorted({cell for _, cell in bad.get(place, [])})
                for place in (*numbers, *texts)
            }
        more = {"decimal": self.layout.marks.decimal}
        if self.layout.marks.thousands:
            more["thousands"] = self.layout.marks.thousands
        return self._read([*numbers, *texts], dtype, missing, **more)

    def unreadable(self, numbers: Sequence[int], weighed: bool) -> dict[int, list[tuple[int, str]]]:
        """(row, text) of the cells of each number column that are no numbers under the layout.

        Raises
        ------
        Disagreement, LogError
        """
        out: dict[int, list[tuple[int, str]]] = {}
        pattern = number_pattern(self.layout.marks)
        for place in numbers:
            cells = self._read([place], str, [])[place].to_numpy(dtype=object)
            distinct = {}
            found = []
            for row, cell in enumerate(cells):
                if cell not in distinct:
                    bare = str(cell).strip()
                    gap = bare in self.missing or kind(bare) == "missing"
                    if gap and cell not in self.missing:
                        self.missing.append(str(cell))
                    # only plain blanks around a number are none of its own
                    distinct[cell] = gap or bool(pattern.fullmatch(str(cell).strip(" \t")))
                if not distinct[cell]:
                    found.append((row, str(cell)))
            if found:
                self._judge(place, found, cells.size, weighed)
                out[place] = found
        return out

    def _judge(self, place: int, found: list[tuple[int, str]], count: int, weighed: bool) -> None:
        """A few damaged cells are left out and named; cells of another habit stop the reading."""
        other = [(row, cell) for row, cell in found if kind(cell.strip()) in ("number", "date")]
        if other and not weighed:
            raise Disagreement([int(self.rows[row]) for row, _ in other[:200]], other[0][1], place)
        # float() takes more than a number's digits and signs: such a cell cannot be told from its value
        lookalike = [(row, cell) for row, cell in found if _python_reads(cell)]
        words = sum(kind(cell.strip()) == "words" for _, cell in found)
        many = len(found) - words > max(3, DAMAGE * count) or len(found) > max(3, 0.5 * count)
        # in a short column a number of another habit is no damage
        many |= len(other) > 0.05 * count
        if many or lookalike:
            row, cell = (lookalike or found)[0]
            raise LogError(
                f"{len(found)} cells of the column are no numbers, such as {cell!r}",
                where=f"{self.lines.where(int(self.rows[row]))}, column {place + 1}",
                do="take the text out, or name the channels to read",
                code="unreadable-cell",
            )


def _python_reads(cell: str) -> bool:
    try:
        float(cell)
    except ValueError:
        return False
    return True


class _Stream(io.RawIOBase):
    """Reads from memory without a copy and tells how far it is."""

    def __init__(self, text: memoryview, progress: Callable[[int, int], None] | None) -> None:
        super().__init__()
        self.text = text
        self.at = 0
        self.progress = progress

    def readable(self) -> bool:
        return True

    def readinto(self, buffer: Any) -> int:
        piece = self.text[self.at : self.at + len(buffer)]
        buffer[: len(piece)] = piece
        self.at += len(piece)
        if self.progress is not None:
            self.progress(self.at, len(self.text))
        return len(piece)
