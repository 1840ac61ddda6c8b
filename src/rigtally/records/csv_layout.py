"""How a text log is laid out: separator, number marks, the kinds of its columns, where its rows begin."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from rigtally.errors import LogError, UsageError
from rigtally.records.csv_cells import Marks, kind, number, split
from rigtally.records.csv_lines import Lines, spread
from rigtally.records.csv_marks import Verdict, allowed_readings, decide

HEAD = 300
SEPARATORS = ("\t", ";", "|", ",", " ")
STRONG = ("\t", ";", "|")
WORDS = {"\t": "tabs", ";": "semicolons", "|": "bars", ",": "commas", " ": "blanks", "": "nothing"}
_NAMED = {
    "tab": "\t", "\\t": "\t", "comma": ",", "semicolon": ";", "space": " ", "blank": " ", "blanks": " ",
    "bar": "|", "pipe": "|",
}  # fmt: skip
_READABLE = {"number", "stamp", "date", "clock"}
# patterns of a number that only one reading allows
_DECISIVE = (
    rb"(?<![\d.,])0[MARK]\d", rb"\d[MARK]\d{1,2}(?![\d])", rb"\d[MARK]\d{4,}", rb"\d{4,}[MARK]\d",
    rb"[MARK]\d{3}[MARK]\d{3}",
)  # fmt: skip


@dataclass(frozen=True)
class Wishes:
    """What the caller states about the layout; None is "find out"."""

    separator: str | None = None
    decimal: str | None = None
    thousands: str | None = None
    header: int | None = None

    @classmethod
    def of(
        cls, separator: str | None, decimal: str | None, thousands: str | None, header: int | str | None
    ) -> Wishes:
        """Check and name them.

        Raises
        ------
        UsageError
            code "bad-option".
        """
        if separator is not None:
            separator = _NAMED.get(separator.lower(), separator)
            if separator not in SEPARATORS:
                raise UsageError(
                    f"separator {separator!r} is not one",
                    do="state one of comma, semicolon, tab, space, bar",
                    code="bad-option",
                )
        if decimal is not None:
            decimal = {"comma": ",", "point": ".", "dot": "."}.get(decimal.lower(), decimal)
            if decimal not in (".", ","):
                raise UsageError(f"decimal sign {decimal!r} is not one", do="state . or ,", code="bad-option")
        if thousands is not None:
            named = {"none": "", "comma": ",", "point": ".", "dot": ".", "space": " ", "\u2019": "'"}
            thousands = named.get(thousands.lower(), " " if thousands in "\u00a0\u2009\u202f" else thousands)
            if thousands not in ("", ",", ".", " ", "'") or thousands == decimal:
                raise UsageError(
                    f"thousands mark {thousands!r} is not one",
                    do="state none, or one of , . ' space, other than the decimal sign",
                    code="bad-option",
                )
        if isinstance(header, str):
            if header.lower() != "none" and not header.isdigit():
                raise UsageError(
                    f"header {header!r} is no line", do="state the line's number, or none", code="bad-option"
                )
            header = 0 if header.lower() == "none" else int(header)
        return cls(separator, decimal, thousands, header)


@dataclass(frozen=True)
class Layout:
    """How the rows are to be read.

    Attributes
    ----------
    separator : str
        " " stands for any run of blanks, "" for a single column.
    marks : Marks
    kinds : tuple of str
        Of each column: "number", "stamp", "date", "clock", "words", "odd" or "missing".
    first : int
        The first line of rows, counted from 0.
    header_speaks : bool
        The line above the rows has one word for each column.
    """

    separator: str
    marks: Marks
    kinds: tuple[str, ...]
    first: int
    header_speaks: bool = False

    @property
    def count(self) -> int:
        """Cells of a line."""
        return len(self.kinds)


def detect(lines: Lines, wishes: Wishes, extra: Iterable[int] = ()) -> Layout:
    """Find the layout from samples of the lines (and the lines in `extra`).

    Raises
    ------
    LogError
        codes "no-numbers", "ambiguous".
    """
    extra = list(extra)
    head = HEAD
    while True:
        rows = list(range(min(head, len(lines))))
        found = [
            layout
            for separator in _possible(lines, rows, wishes)
            if (layout := _candidate(lines, rows, separator, wishes, extra)) is not None
        ]
        # rows that begin at the end of the sample are too few to judge
        if found and (len(rows) == len(lines) or any(len(rows) - each.first >= 20 for each in found)):
            break
        if len(rows) == len(lines):
            raise LogError(
                "no rows of numbers were found",
                where=lines.source.name,
                do="name a log with columns of numbers, or state --separator and --decimal",
                code="no-numbers",
            )
        head *= 4
    return _settled(_only(lines, found, wishes), lines, wishes, extra)


def _possible(lines: Lines, rows: Sequence[int], wishes: Wishes) -> list[str]:
    """Separators that occur, and one that does not (for a single column)."""
    if wishes.separator is not None:
        return [wishes.separator]
    begin, end = int(lines.begins[rows[0]]), int(lines.ends[rows[-1]])
    text = bytes(lines.source.text[begin:end])
    there = [separator for separator in SEPARATORS if separator.encode() in text]
    if "\t" in there and " " not in there:
        there.append(" ")
    absent = [separator for separator in SEPARATORS[:-1] if separator not in there]
    return [*there, *absent[:1]]


def _candidate(
    lines: Lines, head: Sequence[int], separator: str, wishes: Wishes, extra: Sequence[int]
) -> Layout | None:
    """The layout with this separator, or None where it makes no table of numbers."""
    cells = {row: split(lines[row], separator) for row in head}
    kinds = {row: [kind(cell) for cell in line] for row, line in cells.items() if any(line)}
    if wishes.header:
        kinds = {row: each for row, each in kinds.items() if row >= wishes.header}
    like = {row: each for row, each in kinds.items() if _like_data(each)}
    if not like:
        return None
    count = Counter(len(each) for each in like.values()).most_common(1)[0][0]
    rows = [row for row, each in like.items() if len(each) == count]
    columns = tuple(_column_kind([like[row][place] for row in rows]) for place in range(count))
    first = _first_row(lines, kinds, columns)
    rows = [row for row in rows if row >= first]
    if "number" not in columns or "mixed" in columns:
        return None
    inside = [each for row, each in kinds.items() if row >= first]
    if sum(len(each) == count for each in inside) < 0.8 * len(inside) and len(inside) > 3:
        return None
    numbers = _number_cells(lines, [*rows, *extra, *_elsewhere(lines, first)], separator, columns)
    readings = allowed_readings(separator, wishes.decimal, wishes.thousands)
    verdict = decide(numbers, readings, separator)
    if verdict.marks is None:
        return None
    return Layout(separator, verdict.marks, columns, first, _header_speaks(lines, first, separator, count))


def _like_data(kinds: Sequence[str]) -> bool:
    known = [each for each in kinds if each != "missing"]
    readable = sum(each in _READABLE for each in known)
    return readable >= 1 and 2 * readable >= len(known)


def _first_row(lines: Lines, kinds: dict[int, list[str]], columns: Sequence[str]) -> int:
    """The first row that fits, or a damaged one that stands between it and what stands above.

    Raises
    ------
    LogError
        code "two-tables": rows above the names.
    """
    fits = [row for row, each in kinds.items() if _fits(each, columns)]
    names = [
        row
        for row, each in kinds.items()
        if len(each) == len(columns) > 1 and all(known == "words" for known in each)
    ]
    below = [row for row in names if fits and fits[0] < row and not lines.comment(row)]
    if below and sum(row < below[-1] for row in fits) > 1:
        raise LogError(
            f"rows stand above and below the names {lines[below[-1]][:60]!r}",
            where=lines.where(below[-1]),
            do="cut the file into one table each",
            code="two-tables",
        )
    first = next((row for row in fits if not below or row > below[-1]), next(iter(kinds)))
    for row in reversed([row for row in kinds if row < first]):
        if lines.comment(row):
            continue
        each = kinds[row]
        damaged = _like_data(each) and 2 <= len(each) <= len(columns) + 2
        if not damaged or each[0] == "words":
            break
        first = row
    return first


def _fits(kinds: Sequence[str], columns: Sequence[str]) -> bool:
    """Every cell is of its column's kind, or missing; not all are."""
    return (
        len(kinds) == len(columns)
        and all(a in (b, "missing") or b in ("words", "missing") for a, b in zip(kinds, columns, strict=True))
        and any(each in _READABLE for each in kinds)
    )


def _column_kind(kinds: Sequence[str]) -> str:
    tally = Counter(each for each in kinds if each != "missing")
    if not tally:
        return "missing"
    best, count = tally.most_common(1)[0]
    total = sum(tally.values())
    if best == "words" or count < 0.8 * total:
        # status words beside a few codes that begin with a digit are words still
        if best == "words" and tally["number"] + tally["stamp"] < 0.2 * total:
            return "words"
        if best == "number" and count >= 0.5 * total and tally["words"] + count == total:
            return "number"
        return "mixed"
    return best


def _elsewhere(lines: Lines, first: int) -> list[int]:
    """Lines from the rest of the file."""
    rows = len(lines)
    middle = [int(share * (rows - first)) + first + step for share in (0.3, 0.6, 0.9) for step in range(15)]
    return [row for row in (*middle, *range(rows - 40, rows)) if first <= row < rows]


def _number_cells(lines: Lines, rows: Iterable[int], separator: str, columns: Sequence[str]) -> list[str]:
    out: list[str] = []
    for row in rows:
        line = split(lines[row], separator)
        if len(line) != len(columns):
            continue
        out.extend(
            cell
            for cell, column in zip(line, columns, strict=True)
            if column == "number" and kind(cell) in ("number", "date")
        )
    return out


def _header_speaks(lines: Lines, first: int, separator: str, count: int) -> bool:
    for row in range(first - 1, max(first - 6, -1), -1):
        if lines.blank(row):
            continue
        words = split(lines[row].lstrip("#%!/ "), separator)
        if count > 1 and len(words) == count and all(kind(word) in ("words", "missing") for word in words):
            return True
    return False


def _only(lines: Lines, found: list[Layout], wishes: Wishes) -> Layout:
    """The one layout; two that give different tables are refused, with both shown."""
    found = [each for each in found if "odd" not in each.kinds] or found
    strong = [each for each in found if each.separator in STRONG and each.count > 1]
    found = strong or found
    speaking = [each for each in found if each.header_speaks]
    found = speaking or found
    several = [each for each in found if each.count > 1]
    single = [each for each in found if each.count == 1][:1]
    if not several:
        return single[0]
    rivals = several + single
    best = rivals[0]
    for other in rivals[1:]:
        row = max(best.first, other.first)
        if split(lines[row], best.separator) == split(lines[row], other.separator):
            continue
        raise _ambiguous(lines, row, _reading(lines, row, best), _reading(lines, row, other), "--separator")
    stated = wishes.separator == "," and wishes.decimal == "."
    # names tell how many columns there are, unless the caller says that commas are decimal signs
    told = stated or (best.header_speaks and wishes.decimal != ",")
    if best.separator == "," and best.count > 1 and not told:
        _refuse_pairs(lines, best)
    return best


def _refuse_pairs(lines: Lines, layout: Layout) -> None:
    """Whole numbers between commas, and no names to count them by: half of them may be decimals."""
    cells = split(lines[layout.first], ",")
    numbers = [kind(cell) for cell in cells]
    pairs = [i for i in range(len(cells) - 1) if numbers[i] == numbers[i + 1] == "number"]
    sample = _number_cells(lines, range(layout.first, min(layout.first + 200, len(lines))), ",", layout.kinds)
    if pairs and not any(set(cell) & set(".,") for cell in sample):
        joined: list[str] = []
        for place, cell in enumerate(cells):
            if place % 2 and joined and numbers[place] == "number":
                joined[-1] += "." + cell
            else:
                joined.append(cell)
        first, second = " | ".join(cells), " | ".join(joined)
        raise _ambiguous(
            lines, layout.first, f"{first} (commas between columns)",
            f"{second} (decimal commas)", "--separator comma and --decimal .",
        )  # fmt: skip


def _reading(lines: Lines, row: int, layout: Layout) -> str:
    cells = split(lines[row], layout.separator)
    between = f"columns between {WORDS[layout.separator]}" if layout.count > 1 else "one column"
    return f"{' | '.join(cells)} ({between}, {layout.marks.words()})"


def _ambiguous(lines: Lines, row: int, first: str, second: str, option: str) -> LogError:
    return LogError(
        f"the line {lines[row][:80]!r} can be read as {first} or as {second}",
        where=lines.where(row),
        do=f"state {option}",
        code="ambiguous",
    )


def _settled(layout: Layout, lines: Lines, wishes: Wishes, extra: Sequence[int]) -> Layout:
    """Where the sample leaves the marks open, ask the whole file; then refuse."""
    readings = allowed_readings(layout.separator, wishes.decimal, wishes.thousands)
    rows = [*range(layout.first, min(layout.first + HEAD, len(lines))), *extra]
    rows += _elsewhere(lines, layout.first)
    verdict = _judged(layout, lines, rows, readings)
    if verdict.open or not verdict.seen:
        verdict = _judged(layout, lines, [*rows, *_marked_lines(lines, layout)], readings)
    if verdict.marks is None:
        return layout
    if verdict.open and verdict.rival is not None:
        row = next((r for r in range(layout.first, len(lines)) if verdict.cell in lines[r]), layout.first)
        raise LogError(
            f"{verdict.cell!r} can be read as {_value(verdict.cell, verdict.marks)} "
            f"({verdict.marks.words()}) or as {_value(verdict.cell, verdict.rival)} "
            f"({verdict.rival.words()})",
            where=lines.where(row),
            do="state --decimal and --thousands",
            code="ambiguous",
        )
    return Layout(layout.separator, verdict.marks, layout.kinds, layout.first, layout.header_speaks)


def _judged(layout: Layout, lines: Lines, rows: Iterable[int], readings: Sequence[Marks]) -> Verdict:
    return decide(_number_cells(lines, rows, layout.separator, layout.kinds), readings, layout.separator)


def _value(cell: str, marks: Marks) -> str:
    return f"{number(cell, marks):.12g}"


def _marked_lines(lines: Lines, layout: Layout) -> list[int]:
    """Lines anywhere in the file whose marks may decide."""
    begin = int(lines.begins[layout.first])
    text = lines.source.text[begin:]
    signs = lines.signs[begin:]
    rows: list[int] = []
    for mark in (b".", b","):
        if mark.decode() == layout.separator:
            continue
        places = np.flatnonzero(signs == mark[0])
        if places.size == 0:
            continue
        rows += spread(lines.of(places[:: max(places.size // 20_000, 1)] + begin), 1500)
        for pattern in _DECISIVE:
            search = re.compile(pattern.replace(b"MARK", mark))
            for found, match in enumerate(search.finditer(text)):
                rows.append(int(lines.of(np.array([match.start() + begin]))[0]))
                if found >= 20:
                    break
    return rows
