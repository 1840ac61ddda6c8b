"""One cell of a text log: a number (under a given reading of its marks), a stamp, a gap, or words."""

from __future__ import annotations

import csv
import re
from dataclasses import dataclass
from functools import lru_cache

# Spellings of "no value here", in lower case.
MISSING = frozenset(
    {
        "", "nan", "-nan", "na", "n/a", "n.a.", "#n/a", "#na", "<na>", "null", "none", "nil", "-",
        "--", "---", "?", "*", "missing", "no data", "nodata", "invalid", "void", "#value!",
        "#div/0!", "#ref!", "#num!", "1.#qnan", "-1.#qnan", "1.#ind", "-1.#ind", "1,#qnan",
        "-1,#qnan", "1,#ind", "-1,#ind", "-nan(ind)", "nan(ind)", "err", "error", "bad", "fail",
        "ol", "ovl", "over", "overload", "overrange", "overflow",
    }
)  # fmt: skip
# Spaces and high commas that group digits; all are read as one mark.
SPACES = " \u00a0\u2009\u202f\u2007"
HIGH_COMMAS = "'\u2019"

_CLOCK = r"(?:\d{1,2}:\d{2}(?::\d{2}(?:[.,]\d+)?)?(?:\s?[AaPp]\.?[Mm]\.?)?|\d{1,4}:\d{2}[.,]\d+)"
_MONTH = r"(?:jan|feb|mar|apr|may|jun|jul|aug|sep|oct|nov|dec)[a-z]*"
_YMD = r"\d{4}([-/.])\d{1,2}\1\d{1,2}"
_DMY = rf"(?:\d{{1,2}}([-/.])\d{{1,2}}\2(?:\d{{4}}|\d{{2}})|\d{{1,2}}[-/. ]{_MONTH}[-/. ]\d{{4}})"
_ZONE = r"(?:\s?(?:Z|UTC|[+-]\d{2}:?\d{2}|[+-]\d{2}))?"
STAMP = re.compile(rf"(?:{_YMD}|{_DMY})(?:T|\s+|,\s*){_CLOCK}{_ZONE}", re.IGNORECASE)
DATE = re.compile(rf"(?:{_YMD}|{_DMY})", re.IGNORECASE)
CLOCK = re.compile(_CLOCK + _ZONE)
_LOOSE = re.compile(r"[+-]?(?:\d[\d.,'\u2019 \u00a0\u2009\u202f\u2007]*)?[.,]?\d\.?(?:[eE][+-]?\d+)?")
_DOUBLE_MARK = re.compile(r"[.,'\u2019 \u00a0\u2009\u202f\u2007]{2}")
_INFINITE = re.compile(r"[+-]?inf(?:inity)?", re.IGNORECASE)


@dataclass(frozen=True)
class Marks:
    """How numbers are written: the decimal sign, and the mark between thousands ("" for none).

    Every space groups like " ", every high comma like "'".
    """

    decimal: str
    thousands: str

    def words(self) -> str:
        """For a person."""
        sign = {".": "point", ",": "comma"}[self.decimal]
        mark = {
            "": "no thousands mark",
            ".": "a point between thousands",
            ",": "a comma between thousands",
            " ": "a space between thousands",
            "'": "a high comma between thousands",
        }[self.thousands]
        return f"decimal {sign}, {mark}"


READINGS = tuple(
    Marks(decimal, thousands)
    for thousands in ("", ",", ".", " ", "'")
    for decimal in (".", ",")
    if decimal != thousands
)


@lru_cache(maxsize=16)
def number_pattern(marks: Marks) -> re.Pattern[str]:
    """What a number looks like under a reading: groups of three after one to three, no leading zero."""
    point = re.escape(marks.decimal)
    plain = rf"\d+(?:{point}\d*)?|{point}\d+"
    group = {"": "", " ": f"[{SPACES}]", "'": f"[{HIGH_COMMAS}]"}.get(
        marks.thousands, re.escape(marks.thousands)
    )
    # a lone decimal comma at the end of a number is nobody's habit
    if marks.decimal == ",":
        plain = rf"\d+(?:{point}\d+)?|{point}\d+"
    if group:
        plain = rf"[1-9]\d{{0,2}}(?:{group}\d{{3}})+(?:{point}\d+)?|{plain}"
    return re.compile(rf"[+-]?(?:{plain})(?:[eE][+-]?\d+)?")


@lru_cache(maxsize=65536)
def number(text: str, marks: Marks) -> float | None:
    """The value of a cell under a reading, or None: the slow, obvious reference."""
    if not number_pattern(marks).fullmatch(text):
        return None
    if marks.thousands:
        for mark in {" ": SPACES, "'": HIGH_COMMAS}.get(marks.thousands, marks.thousands):
            text = text.replace(mark, "")
    return float(text.replace(marks.decimal, "."))


@lru_cache(maxsize=65536)
def kind(text: str) -> str:
    """What a cell is before its marks are decided.

    "missing", "number" (some reading makes it one), "stamp", "date", "clock", "words" (no digit first) or
    "odd" (begins like a number and is none).
    """
    if text.lower() in MISSING or _INFINITE.fullmatch(text):
        return "missing"
    if _LOOSE.fullmatch(text) and not _DOUBLE_MARK.search(text):
        # 01.02.2024 looks like a number, and is a date
        if DATE.fullmatch(text) and text.count(".") == 2 and not _grouped(text):
            return "date"
        return "number"
    if STAMP.fullmatch(text):
        return "stamp"
    if DATE.fullmatch(text):
        return "date"
    if CLOCK.fullmatch(text):
        return "clock"
    return "odd" if re.match(r"[+-]?[.,]?\d", text) else "words"


def _grouped(text: str) -> bool:
    return any(number_pattern(marks).fullmatch(text) for marks in READINGS if marks.thousands)


def split(line: str, separator: str) -> list[str]:
    """The cells of a line, without quotes and outer blanks; " " stands for any run of blanks."""
    if '"' in line:
        try:
            cells = next(
                csv.reader(
                    [line.strip() if separator == " " else line],
                    delimiter=separator,
                    skipinitialspace=True,
                    strict=False,
                ),
                [],
            )
        except csv.Error:
            return [line]
        return [cell.strip() for cell in cells]
    if separator == " ":
        return [cell for cell in re.split(r"[ \t]+", line) if cell]
    return [cell.strip() for cell in line.split(separator)]
