"""No damaged log is misread, and no log of any numbers reads to others than were written."""

from __future__ import annotations

import tempfile
import time
from collections import Counter
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

import rigtally as rt
from log_forms import forms
from log_mutants import moved, mutant
from rigtally.records.record import Record

# a tenth of what benchmarks/fuzz_reading.py draws
MUTANTS = 500


def test_no_untouched_cell_moves_in_damaged_logs(tmp_path: Path) -> None:
    """500 damaged logs: no traceback, none slow, no untouched cell moved; 30 % and more are read."""
    every = [form for form in forms() if not form.ambiguous]
    path = tmp_path / "log.csv"
    tally: Counter[str] = Counter()
    for k in range(MUTANTS):
        rng = np.random.default_rng([77, k])
        form = every[int(rng.integers(len(every)))]
        damaged = mutant(form, rng)
        path.write_bytes(damaged.content)
        begin = time.monotonic()
        try:
            found = rt.read(path)
        except rt.RigtallyError as refusal:
            assert refusal.what and refusal.where and refusal.do and refusal.code
            tally["refused"] += 1
        else:
            assert isinstance(found, Record)
            fault = moved(damaged, found)
            assert fault is None, f"{k} {form.name}: {damaged.how}: {fault}"
            tally["read"] += 1
        assert time.monotonic() - begin < 10.0
    assert tally["read"] >= 0.3 * MUTANTS


def test_the_check_sees_a_moved_cell(tmp_path: Path) -> None:
    """The check is no idle one: a cell, a row or a channel that is moved on purpose is found."""
    form = next(iter(forms()))
    path = tmp_path / "log.csv"
    sound = mutant(form, np.random.default_rng(0))
    text = form.text().splitlines(keepends=True)
    head = len(text) - len(sound.whole)

    def check(lines: list[str]) -> str | None:
        path.write_text("".join(lines), encoding="utf-8")
        clean = type(sound)(b"", np.ones_like(sound.whole), "")
        found = rt.read(path)
        assert isinstance(found, Record)
        return moved(clean, found)

    assert check(text) is None
    cells = text[head + 9].split(form.separator)
    swapped = form.separator.join([cells[0], cells[2], cells[1], cells[3]])
    assert check([*text[: head + 9], swapped, *text[head + 10 :]]) is not None
    assert check([*text[: head + 9], *text[head + 10 :]]) is not None
    names = text[head - 1].split(form.separator)
    renamed = form.separator.join([names[0], names[2], names[1], names[3]])
    assert check([*text[: head - 1], renamed, *text[head:]]) is not None


CELLS = st.decimals(min_value=-(10**7), max_value=10**7, places=3, allow_nan=False)


@settings(max_examples=150, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
@given(
    table=st.integers(1, 4).flatmap(
        lambda width: st.lists(st.tuples(*[CELLS] * width), min_size=2, max_size=12)
    ),
    places=st.integers(0, 3),
    separator=st.sampled_from([";", ",", "\t", " ", "|"]),
    marks=st.sampled_from([(".", ""), (",", ""), (".", ","), (",", "."), (".", "'")]),
    named=st.booleans(),
)
def test_any_numbers_read_as_written_or_not_at_all(
    table: list[tuple[object, ...]], places: int, separator: str, marks: tuple[str, str], named: bool
) -> None:
    """Short logs of any numbers in any marks: the same numbers, or a refusal; never others."""
    decimal, thousands = marks
    # with a comma between columns and none in the cells a point is the decimal sign, by rule
    assume(not (separator == "," and thousands == "."))
    width = len(table[0])
    written = [
        [
            f"{cell:,.{places}f}".replace(",", "T").replace(".", decimal).replace("T", thousands)
            for cell in row
        ]
        for row in table
    ]
    lines = [separator.join(row) for row in written]
    if named:
        lines.insert(0, separator.join(f"c{k}" for k in range(width)))
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "log.csv"
        path.write_text("\n".join(lines) + "\n", encoding="utf-8")
        try:
            found = rt.read(path, rate=10.0)
        except rt.RigtallyError as refusal:
            assert refusal.code in ("ambiguous", "header-mismatch", "no-numbers", "ragged", "two-tables",
                                    "unreadable-cell"), refusal.line()  # fmt: skip
            return
    assert isinstance(found, Record)
    read = np.array([channel.samples for channel in found.channels])
    truth = np.array([[float(f"{cell:.{places}f}") for cell in row] for row in table]).T
    np.testing.assert_array_equal(read, truth)


@pytest.mark.parametrize("separator", [",", " "])
def test_every_byte_in_a_cell(separator: str, tmp_path: Path) -> None:
    """Each of 255 bytes put into a cell, before it and behind it, leaves the other cells where they are."""
    path = tmp_path / "log.csv"
    base = [[f"{0.5 * k:.2f}", f"{3.25 - k:.3f}", f"{k * k + 0.125:.3f}"] for k in range(24)]
    truth = np.array(base, dtype=float)
    for byte in range(1, 256):
        rows = [[cell.encode() for cell in row] for row in base]
        at = byte % 3
        rows[12][1] = rows[12][1][: 2 * at] + bytes([byte]) + rows[12][1][2 * at :]
        sign = separator.encode()
        path.write_bytes(
            sign.join([b"t[s]", b"p[kPa]", b"q[kPa]"]) + b"\n" + b"\n".join(map(sign.join, rows)) + b"\n"
        )
        try:
            found = rt.read(path)
        except rt.RigtallyError:
            continue
        assert found.names == ("p", "q"), byte
        others = np.arange(24) != 12
        np.testing.assert_array_equal(found.channels[1].in_written_unit, truth[:, 2])
        np.testing.assert_array_equal(found.channels[0].in_written_unit[others], truth[others, 1])
