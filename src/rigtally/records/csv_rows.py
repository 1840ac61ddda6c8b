"""Which lines of a text log are its rows: the cells of every line counted, quotes and all."""

from __future__ import annotations

import re
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.records.csv_cells import kind, split
from rigtally.records.csv_layout import Layout
from rigtally.records.csv_lines import Lines

_BLOCK = 1 << 22
_SUMMARY = re.compile(
    r"\W*(mean|average|avg|min|max|minimum|maximum|total|sum|std|stdev|rms|median|end|count|mittel\w*)\b",
    re.IGNORECASE,
)


def find_rows(lines: Lines, layout: Layout) -> tuple[NDArray[np.int64], int, tuple[str, ...]]:
    """Which lines are rows: every line from the first row on is counted cell by cell.

    Returns
    -------
    (rows,) line numbers; the line after the last row; the lines of the footer

    Raises
    ------
    LogError
        codes "ragged", "quotes", "two-tables".
    """
    counts = _cell_counts(lines, layout)
    good = counts == layout.count
    if layout.count == 1:
        good &= lines.ends[layout.first :] > lines.begins[layout.first :]
    last = int(np.flatnonzero(good)[-1]) + 1 if good.any() else 0
    while last > 1 and _closes(lines[layout.first + last - 1]):
        last -= 1
        while last > 1 and not good[last - 1]:
            last -= 1
    footer = list(range(layout.first + last, min(len(lines), layout.first + last + 60)))
    rest = len(lines) - layout.first - last
    _refuse_rows_below(lines, layout, footer, rest)
    wrong = np.flatnonzero(~good[:last])
    # blank and comment lines between the rows are no rows
    dropped = 0
    for place in wrong[:20_000]:
        row = layout.first + int(place)
        if lines.comment(row) or (layout.count > 1 and lines.blank(row)):
            dropped += 1
            continue
        if layout.count == 1 and lines.blank(row):
            good[place] = True
            dropped += 1
            continue
        raise LogError(
            f"the line has {int(counts[place])} cells, the others have {layout.count}: {lines[row][:60]!r}",
            where=lines.where(row),
            do="mend the line or take it out",
            code="ragged",
        )
    if dropped < wrong.size:
        raise LogError(
            f"{wrong.size} lines have not {layout.count} cells",
            where=lines.source.name,
            do="state --separator",
            code="ragged",
        )
    rows = np.flatnonzero(good[:last]) + layout.first
    texts = tuple(lines[row] for row in footer if not lines.blank(row))
    return rows, layout.first + last, texts


def _closes(line: str) -> bool:
    return bool(_SUMMARY.match(line))


def _refuse_rows_below(lines: Lines, layout: Layout, footer: Sequence[int], rest: int) -> None:
    """What stands below the rows must not be rows cut short or run together."""
    for row in footer:
        cells = split(lines[row], layout.separator or ",")
        kinds = [kind(cell) for cell in cells if cell]
        readable = sum(each in ("number", "stamp", "date", "clock") for each in kinds)
        if lines.comment(row) or not kinds or kinds[0] == "words":
            continue
        if 2 * readable >= len(kinds):
            raise LogError(
                f"the line has {len(cells)} cells, the others have {layout.count}: {lines[row][:60]!r}",
                where=lines.where(row),
                do="mend the line or take it out",
                code="ragged",
            )
    if rest > 60 and rest > 0.2 * (len(lines) - layout.first):
        raise LogError(
            f"{rest} lines below the rows are read as no rows",
            where=lines.where(footer[0]),
            do="state --separator, or cut the file into one table each",
            code="two-tables",
        )


def _cell_counts(lines: Lines, layout: Layout) -> NDArray[np.int64]:
    """(lines,) how many cells each line from the first row on has."""
    begins, ends = lines.begins[layout.first :], lines.ends[layout.first :]
    if layout.count == 1 and layout.separator != " ":
        return np.ones(begins.size, dtype=np.int64)
    counts = np.empty(begins.size, dtype=np.int64)
    row = 0
    while row < begins.size:
        stop = int(np.searchsorted(ends, begins[row] + _BLOCK, side="left"))
        stop = max(stop, row + 1)
        block = lines.signs[int(begins[row]) : int(ends[stop - 1])]
        local = begins[row:stop] - begins[row]
        marks = _separators(block, layout.separator, local, lines, layout.first + row)
        counts[row:stop] = _counted(marks, local, ends[row:stop] - begins[row], layout)
        row = stop
    return counts


def _counted(
    marks: NDArray[np.int64], begins: NDArray[np.int64], ends: NDArray[np.int64], layout: Layout
) -> NDArray[np.int64] | int:
    """Cells of each line, from where its separators (with blanks: its cells) lie."""
    more = 0 if layout.separator == " " else 1
    each = layout.count - more
    if each > 0 and marks.size == begins.size * each:
        # as many as there should be, the first and the last of each line within it: so all are
        table = marks.reshape(-1, each)
        if bool(np.all(table[:, 0] >= begins)) and bool(np.all(table[:, -1] < ends)):
            return layout.count
    return np.diff(np.searchsorted(marks, np.append(begins, ends[-1] + 1))) + more


def _separators(
    block: NDArray[np.uint8], separator: str, begins: NDArray[np.int64], lines: Lines, first: int
) -> NDArray[np.int64]:
    """Positions of the separators outside quotes; with blanks, of the beginnings of the cells."""
    quotes = np.flatnonzero(block == 34)
    if separator == " ":
        space = (block == 32) | (block == 9) | (block == 10) | (block == 13)
        before = np.empty_like(space)
        before[0] = True
        before[1:] = space[:-1]
        marks = np.flatnonzero(~space & before)
    else:
        marks = np.flatnonzero(block == ord(separator))
    if quotes.size:
        odd = np.flatnonzero(np.diff(np.searchsorted(quotes, np.append(begins, block.size))) % 2)
        stray = _stray_quotes(block, separator, quotes)
        if odd.size or stray.size:
            row = int(odd[0]) if odd.size else int(np.searchsorted(begins, stray[0], side="right")) - 1
            raise LogError(
                "a quote is not closed on its line" if odd.size else "a quote stands inside a cell",
                where=lines.where(first + row),
                do="mend the line or take it out",
                code="quotes",
            )
        marks = marks[np.searchsorted(quotes, marks) % 2 == 0]
    return marks


def _stray_quotes(block: NDArray[np.uint8], separator: str, quotes: NDArray[np.int64]) -> NDArray[np.int64]:
    """Quotes that open behind, or close before, something else than a separator, a blank or a line end."""
    edge = np.zeros(256, dtype=bool)
    edge[[10, 13, 32, 34, ord(separator)]] = True
    edge[9] |= separator == " "
    opening, closing = quotes[0::2], quotes[1::2]
    before = np.where(opening > 0, block[opening - 1], 10)
    after = np.where(closing + 1 < block.size, block[np.minimum(closing + 1, block.size - 1)], 10)
    return np.sort(np.concatenate([opening[~edge[before]], closing[~edge[after]]]))
