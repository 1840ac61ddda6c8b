"""What stands around the rows of a text log: names, units, and a preamble whose metadata is kept."""

from __future__ import annotations

import re
from dataclasses import dataclass, field

from rigtally.errors import LogError
from rigtally.records.csv_cells import kind, split
from rigtally.records.csv_layout import Layout, Wishes
from rigtally.records.csv_lines import Lines
from rigtally.records.written_units import is_unit_row, known, split_name

_PAIR = re.compile(r"^\s*(?P<key>[^:=;\t]{1,80}?)\s*(?:[:=;\t]|,(?=\S))\s*(?P<value>.*?)[\s;,]*$")
_KEYED = re.compile(r"^(?P<key>[^:=]{1,80}?)\s*[:=]\s*(?P<value>.+)$")
_RATE_KEY = re.compile(
    r"(sampl\w*|scan|acquisition)[ _-]*(rate|frequency)|abtast(rate|frequenz)|^fs$", re.IGNORECASE
)
_STEP_KEY = re.compile(
    r"sampl\w*[ _-]*(interval|period|time)|abtastzeit|time[ _-]?step|^dt$|^delta ?t$", re.IGNORECASE
)
_NUMBER_UNIT = re.compile(r"^([+-]?\d+(?:[.,]\d+)?(?:[eE][+-]?\d+)?)\s*(\S.*)?$")
KEPT = 500


@dataclass(frozen=True)
class Heading:
    """Names and written units of the columns (None where none is written), and what else was said."""

    names: tuple[str, ...]
    units: tuple[str | None, ...]
    name_line: int | None = None
    unit_line: int | None = None
    metadata: dict[str, str] = field(default_factory=dict)
    rate: float | None = None


def read_heading(lines: Lines, layout: Layout, wishes: Wishes) -> Heading:
    """Names, units and metadata from the lines above the rows.

    Raises
    ------
    LogError
        codes "header-mismatch", "two-tables".
    """
    found = _rows_above(lines, layout, wishes)
    used = {row for row, _ in found}
    names_at, units_at = _roles(found, wishes)
    unit_cells: list[str | None] = [None] * layout.count
    if units_at is not None:
        unit_cells = [cell.strip().strip("[]()").strip() for cell in found[units_at][1]]
    names: list[str] = []
    for place in range(layout.count):
        name, written = f"column {place + 1}", None
        if names_at is not None and found[names_at][1][place]:
            name, written = split_name(found[names_at][1][place])
        names.append(name)
        unit_cells[place] = written if written is not None else unit_cells[place]
    metadata = _metadata(lines, [row for row in range(layout.first) if row not in used])
    for order, (_, cells) in enumerate(found):
        if order not in (names_at, units_at):
            metadata.setdefault(cells[0] or f"line {found[order][0] + 1}", "; ".join(cells[1:]))
    return Heading(
        tuple(_distinct(names)),
        tuple(unit_cells),
        None if names_at is None else found[names_at][0],
        None if units_at is None else found[units_at][0],
        metadata,
        _stated_rate(metadata),
    )


def _rows_above(lines: Lines, layout: Layout, wishes: Wishes) -> list[tuple[int, list[str]]]:
    """Lines above the rows with one word per column, nearest first."""
    if wishes.header == 0:
        return []
    if wishes.header:
        row = wishes.header - 1
        if row >= layout.first:
            raise LogError(
                f"line {wishes.header} stands below the first row of numbers (line {layout.first + 1})",
                where=lines.source.name,
                do="state the line of the names with --header",
                code="header-mismatch",
            )
        cells = _words(lines[row], layout)
        if cells is None:
            raise _mismatch(lines, row, layout)
        between = [(each, _words(lines[each], layout)) for each in range(layout.first - 1, row, -1)]
        below = [(each, words) for each, words in between if words is not None]
        return [*below[:1], (row, cells)]
    found: list[tuple[int, list[str]]] = []
    row = layout.first - 1
    while row >= 0 and len(found) < 3:
        words = None if lines.blank(row) else _words(lines[row], layout)
        if words is not None:
            found.append((row, words))
        elif found or not (lines.blank(row) or lines.comment(row)):
            break
        row -= 1
    if not found and row >= 0:
        _refuse_other_count(lines, row, layout)
    return found


def _words(line: str, layout: Layout) -> list[str] | None:
    """The line's words, if there is one for each column and none is a number."""
    bare = re.sub(r"^\s*(#+|%+|//|!)\s*", "", line)
    separators = [layout.separator] + [each for each in ("\t", ";", ",", "  ") if each != layout.separator]
    if layout.count == 1:
        separators = [""]
    for separator in separators if layout.separator == " " else separators[:1]:
        if separator == "":
            cells = [bare.strip().strip('"')]
        elif separator == "  ":
            cells = re.split(r"\s{2,}", bare.strip())
        else:
            cells = split(bare, separator)
        if layout.separator == " " and separator == " " and len(cells) != layout.count:
            cells = re.findall(r"[^\s\[(]+(?:\s*[\[(][^\])]*[\])]+)?", bare)
        if len(cells) == layout.count - 1 and layout.kinds[-1] == "missing":
            cells = [*cells, ""]
        if len(cells) == layout.count and any(cells):
            named = [cell for cell in cells if cell]
            if all(kind(cell) in ("words", "missing") or cell in ("°C", "1") for cell in named):
                return cells
    return None


def _roles(found: list[tuple[int, list[str]]], wishes: Wishes) -> tuple[int | None, int | None]:
    """Which of the rows holds the names, and which the units."""
    if not found:
        return None, None
    if wishes.header:
        names = len(found) - 1
        return names, 0 if names > 0 and is_unit_row(found[0][1]) else None
    if len(found) == 1:
        return 0, None
    if is_unit_row(found[0][1]):
        return 1, 0
    bracketed = all(re.fullmatch(r"[\[(].*[\])]|", cell) for cell in found[1][1])
    return 0, 1 if bracketed and is_unit_row(found[1][1]) else None


def _refuse_other_count(lines: Lines, row: int, layout: Layout) -> None:
    """Names above the rows in another number than the rows have cells: which is which is not known."""
    if layout.count == 1 or layout.separator in ("", " "):
        bare = split(lines[row].lstrip("#%!/ "), " ")
        if layout.separator == " " and 2 <= len(bare) < layout.count and _all_names(bare):
            raise _mismatch(lines, row, layout)
        return
    cells = split(lines[row].lstrip("#%!/ "), layout.separator)
    if len(cells) >= 2 and _all_names(cells):
        raise _mismatch(lines, row, layout)


def _all_names(cells: list[str]) -> bool:
    return all(kind(cell) in ("words", "missing") and len(cell) <= 40 and ":" not in cell for cell in cells)


def _mismatch(lines: Lines, row: int, layout: Layout) -> LogError:
    have = len(split(lines[row].lstrip("#%!/ "), layout.separator or ","))
    cells = split(lines[layout.first], layout.separator or ",")
    merged = (
        "; a decimal comma or a thousands mark that also separates would do this"
        if layout.separator in (",", " ") and have < layout.count
        else ""
    )
    return LogError(
        f"the line {lines[row][:60]!r} has {have} cells, the rows have {layout.count}"
        f" ({' | '.join(cells[:6])}){merged}",
        where=lines.where(row),
        do="state --separator and --decimal, or --header none",
        code="header-mismatch",
    )


def _metadata(lines: Lines, rows: list[int]) -> dict[str, str]:
    """key: value, key = value, or a line of words, of at most KEPT lines."""
    out: dict[str, str] = {}
    for row in rows[:KEPT]:
        line = re.sub(r"^\s*(#+|%+|//|!)\s*", "", lines[row]).strip().strip('"').strip()
        if not line.strip(";,\t |"):
            continue
        pair = _KEYED.match(line) or _PAIR.match(line)
        if pair and pair.group("value"):
            out.setdefault(pair.group("key").strip(' "'), pair.group("value").strip(' ";,\t'))
        else:
            out[f"line {row + 1}"] = line[:200]
    return out


def _stated_rate(metadata: dict[str, str]) -> float | None:
    """Samples per second from the preamble, if it states a number with a unit."""
    for key, value in metadata.items():
        bare, in_key = split_name(key)
        found = _NUMBER_UNIT.match(value.strip())
        if not found:
            continue
        amount = float(found.group(1).replace(",", "."))
        written = (found.group(2) or in_key or "").strip()
        unit = known(written) if written else None
        if unit is None or not amount > 0:
            continue
        if _RATE_KEY.search(bare) and unit.si in ("Hz", "1/s") and not re.search(r"rad|rpm", written):
            return amount * unit.factor
        if _STEP_KEY.search(bare) and unit.si == "s":
            return 1.0 / (amount * unit.factor)
    return None


def _distinct(names: list[str]) -> list[str]:
    """Names that occur twice are told apart by a number."""
    seen: dict[str, int] = {}
    out = []
    for name in names:
        seen[name] = seen.get(name, 0) + 1
        out.append(name if seen[name] == 1 else f"{name} ({seen[name]})")
    return out
