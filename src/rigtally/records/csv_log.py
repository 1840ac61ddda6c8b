"""A text log, from its bytes to named columns: layout, heading, rows."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

from rigtally.errors import LogError
from rigtally.records.column import Column
from rigtally.records.csv_head import Heading, read_heading
from rigtally.records.csv_layout import WORDS, Layout, Wishes, detect
from rigtally.records.csv_lines import Lines
from rigtally.records.csv_table import Disagreement, Table, read_table
from rigtally.records.record import Provenance
from rigtally.records.source import Source, open_text
from rigtally.records.time_column import time_like

# how often the layout is looked at again when the rows disagree with it
ROUNDS = 4


@dataclass(frozen=True)
class TextLog:
    """Columns of a text log, where they came from, and the rate that the preamble states."""

    columns: tuple[Column, ...]
    provenance: Provenance
    rate: float | None = None


def read_text(
    file: str,
    *,
    encoding: str | None = None,
    wishes: Wishes | None = None,
    channels: Sequence[str] | None = None,
    missing: Sequence[str] = (),
    progress: Callable[[int, int], None] | None = None,
) -> TextLog:
    """Read all columns of a text log (or the named ones and those that may be the time).

    Raises
    ------
    LogError
    """
    source = open_text(file, encoding)
    lines = Lines(source)
    wishes = wishes or Wishes()
    # the hash takes no Python: it runs beside the reading
    with ThreadPoolExecutor(max_workers=1) as beside:
        hashed = beside.submit(source.sha256)
        layout, table, heading = _read(lines, wishes, channels, missing, progress)
    columns = tuple(
        Column(
            heading.names[place],
            heading.units[place],
            table.numbers.get(place),
            table.texts.get(place),
            "number" if place in table.numbers else layout.kinds[place],
            table.faults.get(place, ()),
            table.lines[0],
        )
        for place in range(layout.count)
        if layout.kinds[place] != "missing" or heading.names[place] != f"column {place + 1}"
    )
    metadata = dict(heading.metadata)
    for number, line in enumerate(table.footer, start=1):
        metadata[f"footer {number}"] = line[:200]
    provenance = Provenance(
        file, hashed.result(), table.lines, (_words(source, layout, heading, table),), metadata
    )
    return TextLog(columns, provenance, heading.rate)


def _read(
    lines: Lines,
    wishes: Wishes,
    channels: Sequence[str] | None,
    missing: Sequence[str],
    progress: Callable[[int, int], None] | None,
) -> tuple[Layout, Table, Heading]:
    extra: list[int] = []
    before: Layout | None = None
    for _ in range(ROUNDS):
        layout = detect(lines, wishes, extra)
        heading = read_heading(lines, layout, wishes)
        wanted = _wanted(lines, layout, heading, channels)
        # the rows' own evidence has been weighed once: what still disagrees is damage
        weighed = layout == before
        try:
            return layout, read_table(lines, layout, wanted, missing, progress, weighed=weighed), heading
        except Disagreement as other:
            extra += other.rows
            before = layout
            last = other
    raise LogError(
        f"{last.cell!r} is no number as the others are written",
        where=f"{lines.where(last.rows[0])}, column {last.column + 1}",
        do="state --decimal and --thousands",
        code="ambiguous",
    )


def _wanted(
    lines: Lines, layout: Layout, heading: Heading, channels: Sequence[str] | None
) -> tuple[int, ...]:
    wanted = []
    for place, kind in enumerate(layout.kinds):
        if kind == "odd" and (channels is None or heading.names[place] in channels):
            raise LogError(
                f"the column {heading.names[place]!r} holds neither numbers nor words",
                where=lines.where(layout.first),
                do="name the channels to read, or take the text out of the column",
                code="unreadable-cell",
            )
        needless = channels is not None and place > 0 and heading.names[place] not in channels
        if kind == "number" and needless and not time_like(heading.names[place]):
            continue
        if kind not in ("words", "odd"):
            wanted.append(place)
    return tuple(wanted)


def _words(source: Source, layout: Layout, heading: Heading, table: Table) -> str:
    """How the file was read, in one line."""
    names = "no names" if heading.name_line is None else f"names in line {heading.name_line + 1}"
    units = "" if heading.unit_line is None else f", units in line {heading.unit_line + 1}"
    between = WORDS[layout.separator] if layout.count > 1 else "nothing (one column)"
    left = f", {table.left_out} blank or comment lines between" if table.left_out else ""
    footer = f", {len(table.footer)} lines below" if table.footer else ""
    return (
        f"{source.encoding} text{' out of gzip' if source.packed else ''}, columns between {between}, "
        f"{layout.marks.words()}; {names}{units}, rows in lines {table.lines[0]} to {table.lines[1]}"
        f"{left}{footer}"
    )
